"""Reading and writing series of snapshots as files."""

from __future__ import annotations

import csv
import os
import warnings
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from .. import writing
from ..checks import InputError
from .archive import read_archive, write_archive
from .cells import read_cells, write_cells
from .series import SnapshotSeries
from .table import ChosenColumns, choose_columns, require_columns, series_from_frame

if TYPE_CHECKING:
    import pandas

__all__ = ["read_snapshots", "write_snapshots"]

_SEPARATORS = {".csv": ",", ".tsv": "\t"}
_SUFFIXES = (*_SEPARATORS, ".parquet", ".npz", ".h5ad")
# What counts as an empty cell of a number column; a label or a text feature keeps these words.
_EMPTY = ["", "NA", "N/A", "NaN", "nan", "null", "NULL"]


def read_snapshots(
    path: str | os.PathLike[str],
    *,
    time: str | None = None,
    position: str | Sequence[str] | None = None,
    weight: str | None = None,
    label: str | None = None,
    features: Sequence[str] = (),
    units: Mapping[str, str] | None = None,
) -> SnapshotSeries:
    """Read a series of snapshots from a table or an archive.

    ``.csv`` and ``.tsv`` are UTF-8 text with a header line, a decimal point and one row per particle; ``.parquet`` is
    the same as columns (it needs ``pip install "ensembles[parquet]"``). Rows of exactly equal time are one snapshot.
    ``.h5ad`` is an AnnData file of cells (it needs ``pip install "ensembles[cells]"``): `time`, `weight` and `label` are
    columns of .obs, and times may be words such as "day 2"; `position` is one key of .obsm, or "pca:30" for components
    made of .X; `features` are columns of .obs or names of genes. Only what is named is read.
    ``.npz`` is a numpy archive without pickled objects; it names its own columns, so that `time` and `position` may be
    left out. Its arrays are

    ======================  ===========================================================================
    format                  the text "ensembles-snapshots"
    version                 the whole number 1
    times                   (K,) increasing numbers
    positions_0, ...        (n_k, d) numbers, one array per snapshot
    weights_0, ...          (n_k,) non-negative numbers; optional, all or none
    masses                  (K,) positive numbers; optional: then every weights_k must have the sum 1
    labels_0, ...           (n_k,) texts; optional, all or none
    rows_0, ...             (n_k,) row numbers of the original table; optional, all or none
    feature_names           (F,) texts; optional; then feature_0_0, ... is feature 0 of snapshot 0
    position_names          (d,) texts; optional
    time_name               a text; optional
    time_unit, length_unit  texts; optional
    growth                  JSON text of the fields of `Growth`; optional
    ======================  ===========================================================================

    Parameters
    ----------
    path : file name ending in .csv, .tsv, .parquet, .npz or .h5ad
    time, position : column of the times and columns of the coordinates; of an archive, the coordinates to keep
    weight, label, features : further columns; of an archive, `features` are those to keep (all when left out)
    units : {"time": ..., "length": ...}, used on axes only; an archive's own units hold where none are given

    Raises
    ------
    InputError
        A missing, empty, damaged or foreign file, a missing column (the nearest name is offered), a text or an empty
        cell in a number column (line and column named; the header is line 1), and every error of
        `SnapshotSeries.from_arrays`.

    Examples
    --------
    >>> import pathlib, tempfile, ensembles
    >>> path = pathlib.Path(tempfile.mkdtemp()) / "beads.csv"
    >>> _ = path.write_text("t_s,x_um\\n0,1.5\\n0,2.5\\n4,3.25\\n")
    >>> ensembles.read_snapshots(path, time="t_s", position=["x_um"], units={"time": "s", "length": "um"})
    SnapshotSeries: 2 snapshots, 1 dimension (x_um in um)
      t_s = 0 s: 2 particles
      t_s = 4 s: 1 particle
    """
    file = _existing_file(path)
    if file.suffix == ".h5ad":
        return read_cells(
            file, time=time, position=position, weight=weight, label=label, features=features, units=units
        )
    if file.suffix == ".npz":
        _refuse_archive_columns(weight, label)
        return read_archive(file, time=time, position=position, features=features, units=units)
    if time is None or position is None:
        missing = "time" if time is None else "position"
        raise InputError(
            f"the columns of a table must be named; {missing} is not given for {str(file)!r}; "
            'name them: read_snapshots(path, time="t", position=["x", "y"])'
        )
    columns = choose_columns(time, position, weight=weight, label=label, features=features)
    if file.suffix == ".parquet":
        return series_from_frame(_parquet_frame(file, columns), columns, units=units, source=repr(str(file)))
    frame = _text_frame(file, columns)
    return series_from_frame(
        frame, columns, units=units, source=repr(str(file)), place=lambda row: f"line {_line_of(file, row)}"
    )


def write_snapshots(series: SnapshotSeries, path: str | os.PathLike[str]) -> None:
    """Write a series as .npz or .h5ad (which lose nothing), or as .csv, .tsv or .parquet with the columns of `to_frame`.

    The file appears under its name only when it is complete. A table does not hold units and original row numbers, and
    its ``weight`` column is exact to rounding.

    Raises
    ------
    InputError
        An unsupported suffix, a folder that does not exist, or two columns of one name.

    Examples
    --------
    >>> import pathlib, tempfile, ensembles
    >>> path = pathlib.Path(tempfile.mkdtemp()) / "series.npz"
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 1.0], [2.0]])
    >>> write_snapshots(series, path)
    >>> ensembles.read_snapshots(path).fingerprint() == series.fingerprint()
    True
    """
    file = Path(path)
    _require_suffix(file)
    if file.suffix == ".npz":
        write_archive(series, file)
    elif file.suffix == ".h5ad":
        write_cells(series, file)
    else:
        writing.write_table(file, series.to_frame())


def _require_suffix(file: Path) -> None:
    if file.suffix not in _SUFFIXES:
        raise InputError(
            f"unsupported kind of file; {str(file)!r} ends in {file.suffix!r}; use one of: {', '.join(_SUFFIXES)}"
        )


def _existing_file(path: str | os.PathLike[str]) -> Path:
    file = Path(path)
    if not file.exists():
        raise InputError(f"missing file; there is no {str(file)!r}; check the name and the folder")
    if file.is_dir():
        raise InputError(f"a file is needed; {str(file)!r} is a folder; name a file in it")
    _require_suffix(file)
    if file.stat().st_size == 0:
        raise InputError(f"empty file; {str(file)!r} has 0 bytes; write it again")
    return file


def _refuse_archive_columns(weight: str | None, label: str | None) -> None:
    for key, name in (("weight", weight), ("label", label)):
        if name is not None:
            raise InputError(f"an .npz archive holds its own {key}s; {key} = {name!r} is given; leave it out")


def _text_frame(file: Path, columns: ChosenColumns) -> pandas.DataFrame:
    """Read a text table; labels stay text, and numbers are read to the last bit."""
    import pandas
    from pandas.errors import ParserError, ParserWarning

    separator = _SEPARATORS[file.suffix]
    header = _header(file, separator)
    if len(header) == 1 and len(columns.names) > 1:
        raise InputError(
            f"the header of {str(file)!r} is one column; it reads {header[0]!r}; separate the columns by "
            + ("commas, or name the file .tsv if tabs separate them" if separator == "," else "tabs")
        )
    require_columns(columns, header, repr(str(file)))
    empty = {name: _EMPTY for name in columns.numbers} | {name: [""] for name in columns.features}
    try:
        with warnings.catch_warnings():
            # pandas only warns when rows are longer than the header: a shifted column must not pass.
            warnings.simplefilter("error", ParserWarning)
            frame = pandas.read_csv(
                file,
                sep=separator,
                encoding="utf-8-sig",
                index_col=False,
                keep_default_na=False,
                na_values=empty,
                dtype=None if columns.label is None else {columns.label: str},
                float_precision="round_trip",
                low_memory=False,
            )
    except (ParserError, ParserWarning, UnicodeDecodeError) as cause:
        raise _unreadable_text(file, separator, len(header), cause) from None
    for name in (*columns.numbers, *columns.features):
        if not pandas.api.types.is_numeric_dtype(frame[name]):
            frame[name] = _numeric_if_possible(frame[name])
    return frame


def _numeric_if_possible(column: pandas.Series) -> pandas.Series:
    """Read a column as numbers where every cell is one: of some cells, such as "inf" or "NaN", pandas makes texts."""
    import pandas

    try:
        return pandas.to_numeric(column.where(~column.isin(["NaN", "nan"])))
    except (TypeError, ValueError):
        return column


def _records(file: Path, separator: str) -> Iterator[tuple[int, list[str]]]:
    """Yield (line, cells) of every line that is not blank; a blank line holds no particle."""
    with file.open(encoding="utf-8-sig", newline="") as stream:
        reader = csv.reader(stream, delimiter=separator)
        line = 1
        for cells in reader:
            if cells and (len(cells) > 1 or cells[0].strip()):
                yield line, cells
            line = reader.line_num + 1


def _header(file: Path, separator: str) -> list[str]:
    try:
        found = next(_records(file, separator), None)
    except (UnicodeDecodeError, csv.Error) as cause:
        raise _unreadable_text(file, separator, 0, cause) from None
    if found is None:
        raise InputError(f"empty file; {str(file)!r} holds blank lines only; write it again with a header and rows")
    return found[1]


def _line_of(file: Path, row: int) -> int:
    """Return the line on which data row `row` begins; the file is read again, which only an error costs."""
    for number, (line, _) in enumerate(_records(file, _SEPARATORS[file.suffix]), start=-1):
        if number == row:
            return line
    return row + 2


def _unreadable_text(file: Path, separator: str, width: int, cause: Exception) -> InputError:
    if isinstance(cause, UnicodeDecodeError):
        return InputError(
            f"the file is not UTF-8 text; {str(file)!r} has a foreign byte at position {cause.start}; save it as UTF-8"
        )
    try:
        for line, cells in _records(file, separator):
            if len(cells) > width:
                return InputError(
                    f"a line has more cells than the header; line {line} of {str(file)!r} has {len(cells)} where "
                    f"{width} are named; put texts with separators in quotes and write numbers with a decimal point"
                )
    except (csv.Error, UnicodeDecodeError):
        pass
    return InputError(f"the table cannot be read; {str(file)!r}: {str(cause).strip()}; correct that line")


def _parquet_frame(file: Path, columns: ChosenColumns) -> pandas.DataFrame:
    try:
        import pyarrow.parquet
    except ImportError:
        raise InputError(
            f"Parquet needs pyarrow; it is not installed, so {str(file)!r} cannot be read; "
            'pip install "ensembles[parquet]", or save the table as .csv'
        ) from None
    try:
        with pyarrow.parquet.ParquetFile(file) as source:
            require_columns(columns, source.schema_arrow.names, repr(str(file)))
            # Whatever index pandas stored is left aside: particles are numbered by their row.
            return source.read(columns=list(dict.fromkeys(columns.names))).to_pandas(ignore_metadata=True)
    except InputError:
        raise
    except (pyarrow.ArrowException, OSError) as cause:
        raise InputError(
            f"the file is not a whole Parquet file; {str(file)!r}: {str(cause).splitlines()[0]}; write it again"
        ) from None
