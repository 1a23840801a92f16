"""Writing files and folders so that nothing half written ever stands under its final name.

Everything is written beside its destination under a hidden name ending in ``.partial`` and renamed when it is complete.
"""

from __future__ import annotations

import importlib.util
import json
import os
import secrets
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from . import checks

if TYPE_CHECKING:
    import pandas as pd

__all__ = [
    "MARKER",
    "atomic_path",
    "output_folder",
    "require_free_folder",
    "require_table_format",
    "write_bytes",
    "write_json",
    "write_table",
    "write_text",
]

_TABLE_FORMATS = (".csv", ".tsv", ".parquet")
MARKER = "summary.json"
"""The file by which a folder is known as an earlier output, so that it may be replaced."""


def _hidden_sibling(path: Path) -> Path:
    # The suffix stays last, because writers such as numpy.savez and pandas choose or append by it.
    return path.with_name(f".{path.stem}.{secrets.token_hex(4)}.partial{path.suffix}")


@contextmanager
def atomic_path(path: str | os.PathLike[str]) -> Iterator[Path]:
    """Yield a path to write to, with the same suffix in the same folder; rename it to `path` if no error came.

    Raises
    ------
    InputError
        If the folder of `path` does not exist, or `path` is a folder.

    Examples
    --------
    >>> import tempfile
    >>> folder = Path(tempfile.mkdtemp())
    >>> with atomic_path(folder / "note.txt") as temporary:
    ...     _ = temporary.write_text("done")
    >>> [file.name for file in folder.iterdir()]
    ['note.txt']
    """
    final = Path(path)
    if not final.parent.is_dir():
        raise checks.InputError(
            f"the folder to write into does not exist; {str(final.parent)!r}; make it, or choose another one"
        )
    if final.is_dir():
        raise checks.InputError(f"the file to write is a folder; {str(final)!r}; choose another name")
    temporary = _hidden_sibling(final)
    try:
        yield temporary
        os.replace(temporary, final)
    finally:
        temporary.unlink(missing_ok=True)


def write_bytes(path: str | os.PathLike[str], content: bytes) -> None:
    """Write bytes to `path`, whole or not at all."""
    with atomic_path(path) as temporary:
        temporary.write_bytes(content)


def write_text(path: str | os.PathLike[str], content: str) -> None:
    """Write UTF-8 text with plain line ends to `path`, whole or not at all."""
    write_bytes(path, content.encode("utf-8"))


def _plain_number(value: Any) -> Any:
    if isinstance(value, np.ndarray):
        return value.tolist()
    if isinstance(value, np.generic):
        return value.item()
    raise TypeError(f"{type(value).__name__} cannot be written as JSON")


def _without_nonfinite(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(key): _without_nonfinite(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_without_nonfinite(item) for item in value]
    if isinstance(value, np.ndarray):
        return _without_nonfinite(value.tolist())
    if isinstance(value, (float, np.floating)) and not np.isfinite(value):
        return None
    return value


def write_json(path: str | os.PathLike[str], content: Any) -> None:
    """Write JSON to `path`; NaN and infinite numbers, which JSON does not have, become null."""
    text = json.dumps(_without_nonfinite(content), indent=2, ensure_ascii=False, allow_nan=False, default=_plain_number)
    write_text(path, text + "\n")


def require_table_format(suffix: str) -> None:
    """Refuse a table format that cannot be written here, before any work is done for it.

    Raises
    ------
    InputError
        If it is not .csv, .tsv or .parquet, or Parquet is asked for and pyarrow is not installed.
    """
    if suffix not in _TABLE_FORMATS:
        raise checks.unknown_name("table format", suffix, _TABLE_FORMATS)
    if suffix == ".parquet" and importlib.util.find_spec("pyarrow") is None:
        raise checks.InputError("Parquet needs pyarrow; it is not installed; install ensembles[parquet], or write CSV")


def write_table(path: str | os.PathLike[str], frame: pd.DataFrame) -> None:
    """Write a data frame as CSV, TSV or Parquet, by the suffix of `path`.

    Raises
    ------
    InputError
        If the suffix is another one, or Parquet is asked for and pyarrow is not installed.
    """
    suffix = Path(path).suffix
    require_table_format(suffix)
    with atomic_path(path) as temporary:
        if suffix == ".parquet":
            frame.to_parquet(temporary, index=False)
        else:
            frame.to_csv(temporary, index=False, sep="\t" if suffix == ".tsv" else ",", lineterminator="\n")


def require_free_folder(folder: str | os.PathLike[str], *, force: bool) -> Path:
    """Refuse an output folder that may not be made, or not be replaced.

    With `force` an existing folder may be replaced if it is empty or an earlier output (it holds summary.json).

    Raises
    ------
    InputError
        If something stands there that must not be replaced, or the place cannot be written to.
    """
    path = Path(os.path.realpath(folder))
    if path.exists() and not path.is_dir():
        raise checks.InputError(f"the output folder is a file; {str(folder)!r}; choose another folder")
    if path.is_dir():
        if not force:
            raise checks.InputError(
                f"the output folder exists; {str(folder)!r}; choose another one, or add --force to replace it"
            )
        if any(path.iterdir()) and not (path / MARKER).is_file():
            raise checks.InputError(
                f"the output folder holds something else than an earlier output; {str(folder)!r} has no {MARKER}; "
                "choose another folder: --force replaces earlier outputs only"
            )
    standing = next(parent for parent in path.parents if parent.exists())
    if not standing.is_dir() or not os.access(standing, os.W_OK):
        raise checks.InputError(
            f"the output folder cannot be made; {str(standing)!r} is not a folder that may be written to; "
            "choose another place"
        )
    return path


@contextmanager
def output_folder(folder: str | os.PathLike[str], *, force: bool = False) -> Iterator[Path]:
    """Yield a new hidden folder beside `folder`; rename it to `folder` if no error came, else remove it.

    An earlier output is replaced only at that moment, and only with `force`.
    """
    final = require_free_folder(folder, force=force)
    final.parent.mkdir(parents=True, exist_ok=True)
    temporary = _hidden_sibling(final)
    temporary.mkdir()
    try:
        yield temporary
        _replace_folder(temporary, require_free_folder(final, force=force))
    finally:
        shutil.rmtree(temporary, ignore_errors=True)


def _replace_folder(temporary: Path, final: Path) -> None:
    if not final.exists():
        os.rename(temporary, final)
        return
    # A folder with content cannot be renamed over: the old one steps aside and comes back if the new one fails.
    aside = _hidden_sibling(final)
    os.rename(final, aside)
    try:
        os.rename(temporary, final)
    except OSError:
        os.rename(aside, final)
        raise
    shutil.rmtree(aside, ignore_errors=True)
