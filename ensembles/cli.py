"""The command line: a thin layer that reads a study, calls the package and says what it did. No mathematics.

Exit status: 0 done, 1 the computation failed and says why, 2 wrong usage or input, 130 interrupted, 143 terminated.
"""

from __future__ import annotations

import functools
import io
import signal
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, ParamSpec

import typer
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn
from rich.table import Table
from rich.text import Text

from . import __version__, checks, writing

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["app", "main"]

app = typer.Typer(
    name="ensembles",
    help="Schrödinger bridges between snapshots of a population whose individuals were lost.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
)
_Arguments = ParamSpec("_Arguments")
_WIDE = 200  # columns of a table that goes into a file or a pipe, where no terminal sets a width

StudyFile = Annotated[Path, typer.Argument(metavar="STUDY", help="The study file (TOML).", show_default=False)]
Force = Annotated[bool, typer.Option("--force", help="Replace what an earlier run wrote.")]


class _Terminated(KeyboardInterrupt):
    """SIGTERM, as a batch system sends it: what is half written is removed as after Ctrl-C."""


def _output() -> Console:
    return Console(width=None if sys.stdout.isatty() else _WIDE, highlight=False)


def _errors() -> Console:
    return Console(stderr=True, highlight=False, soft_wrap=True)


def _reported(command: Callable[_Arguments, None]) -> Callable[_Arguments, None]:
    """Turn the package's errors into a message on stderr and an exit status; let nothing else pass unseen."""

    def failed(message: str, status: int) -> typer.Exit:
        _errors().print(message, markup=False)
        return typer.Exit(status)

    @functools.wraps(command)
    def reported(*arguments: _Arguments.args, **options: _Arguments.kwargs) -> None:
        try:
            command(*arguments, **options)
        except checks.InputError as cause:
            raise failed(f"input error: {cause}", 2) from None
        except checks.ComputationError as cause:
            raise failed(f"computation failed: {cause}", 1) from None
        except MemoryError as cause:
            raise failed(f"computation failed: out of memory; {cause}; use fewer particles or paths", 1) from None
        except KeyboardInterrupt as cause:
            raise failed("interrupted; nothing was written", 143 if isinstance(cause, _Terminated) else 130) from None
        except BrokenPipeError:
            raise
        except OSError as cause:
            raise failed(
                f"a file could not be read or written; {cause}; check the disk and the permissions", 1
            ) from None

    return reported


@contextmanager
def _progress() -> Iterator[Callable[[str, float], None]]:
    """Yield a function of what is being done and the share that is done: a bar on the terminal, nothing in a pipe."""
    console = _errors()
    columns = (BarColumn(), TimeElapsedColumn(), TextColumn("{task.description}", markup=False))
    with Progress(*columns, console=console, transient=True, disable=not console.is_terminal) as progress:
        task = progress.add_task("", total=1.0)
        yield lambda message, done: progress.update(task, description=message, completed=done)


def _print_frame(console: Console, title: str, frame: pd.DataFrame) -> None:
    table = Table(title=Text(title), title_justify="left")
    for name in frame.columns:
        table.add_column(Text(str(name)), justify="left" if frame[name].dtype == object else "right", overflow="fold")
    for row in frame.itertuples(index=False):
        table.add_row(*[Text(f"{value:.4g}" if isinstance(value, float) else str(value)) for value in row])
    console.print(table)


def _say_written(out: Path, written: list[str], warned: list[str]) -> None:
    """Say what was written, and on stderr what the page warns of."""
    for sentence in warned:
        _errors().print(f"warning: {sentence}", markup=False)
    _output().print(f"Wrote {out}: {', '.join(written)}", markup=False, soft_wrap=True)


def _version(wanted: bool) -> None:
    if wanted:
        _output().print(f"ensembles {__version__}")
        raise typer.Exit


@app.callback()
def _common(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version and stop.")
    ] = False,
) -> None:
    pass


@app.command()
@_reported
def demo(
    name: Annotated[str, typer.Argument(help="Which data: beads or cells.", show_default=False)],
    folder: Annotated[Path, typer.Argument(help="Where to write them.", show_default=False)],
    force: Annotated[bool, typer.Option("--force", help="Write into a folder that holds something.")] = False,
    seed: Annotated[int, typer.Option("--seed", min=0, help="Of the random numbers.")] = 0,
) -> None:
    """Write an invented data set and the study file that goes with it."""
    from .snapshots.demo import write_demo

    console = _output()
    data, study = write_demo(name, folder, rng=seed, force=force)
    console.print(f"Wrote {data} and {study}", markup=False, soft_wrap=True)
    console.print(f"Next: ensembles look {study}", markup=False, soft_wrap=True)


@app.command()
@_reported
def look(study_file: StudyFile) -> None:
    """Show what a study's data hold, and whether its noise is of the right order. Writes nothing."""
    from .overview import crowding, gap_table, position_table, snapshot_table, verdicts
    from .study import read_study

    study = read_study(study_file)
    series, prior = study.read_series(), study.build_prior()
    if prior.box is not None:
        for time, cloud in zip(series.times, series.clouds):
            prior.box.require_inside(cloud, f" in snapshot t = {time:g}")
    console = _output()
    _print_frame(console, f"{study.title or study_file}: snapshots", snapshot_table(series))
    _print_frame(console, "Mean ± spread", position_table(series))
    _print_frame(console, f"Gaps under {prior!r}", gap_table(series, prior))
    judged = crowding(series, prior) if study.identity == "same" else verdicts(series, prior)
    for sentence in (*judged, *series.notes()):
        console.print(sentence, markup=False, soft_wrap=True)


@app.command()
@_reported
def solve(
    study_file: StudyFile,
    out: Annotated[Path, typer.Option("--out", help="The folder to write.", show_default=False)],
    seed: Annotated[
        int | None, typer.Option("--seed", min=0, help="Instead of the study's.", show_default=False)
    ] = None,
    force: Force = False,
) -> None:
    """Fit the bridge of a study and write its tables, pictures and report page."""
    from .report.wording import warning_sentences
    from .results import fit_study, write_results
    from .study import read_study

    study = read_study(study_file)
    writing.require_free_folder(out, force=force)
    if study.identity == "same":
        from .link_results import write_links

        with _progress() as say, writing.output_folder(out, force=force) as folder:
            written, warned = write_links(study, folder, seed=study.seed if seed is None else seed, say=say)
        _say_written(out, written, warned)
        return
    with _progress() as say:
        bridge = fit_study(study, say=say)
        with writing.output_folder(out, force=force) as folder:
            written = write_results(study, bridge, folder, seed=study.seed if seed is None else seed, say=say)
    _say_written(out, written, warning_sentences(bridge))


@app.command()
@_reported
def holdout(
    study_file: StudyFile,
    out: Annotated[Path, typer.Option("--out", help="The folder to write.", show_default=False)],
    seed: Annotated[
        int | None, typer.Option("--seed", min=0, help="Instead of the study's.", show_default=False)
    ] = None,
    force: Force = False,
) -> None:
    """Predict snapshots that are left out, choose the noise level, and check the prior; tables and pictures."""
    from .assess import assess_study, held_out_table, write_assessment
    from .study import read_study

    study = read_study(study_file)
    writing.require_free_folder(out, force=force)
    chosen = study.seed if seed is None else seed
    with _progress() as say:
        found = assess_study(study, seed=chosen, say=say)
        with writing.output_folder(out, force=force) as folder:
            written = write_assessment(study, found, folder, seed=chosen)
    console = _output()
    _print_frame(console, "Left-out snapshots: value ± standard error", held_out_table(found.hold_out))
    for sentence in found.sentences:
        console.print(sentence, markup=False, soft_wrap=True)
    console.print(f"Wrote {out}: {', '.join(written)}", markup=False, soft_wrap=True)


def main(arguments: list[str] | None = None) -> Any:
    """Run the command line; ends the process with its exit status."""

    def terminated(number: int, frame: Any) -> None:
        raise _Terminated

    signal.signal(signal.SIGTERM, terminated)
    for stream in (sys.stdout, sys.stderr):
        # A terminal that knows no µ shows a question mark; it must not stop the run.
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")
    app(args=arguments, prog_name="ensembles")
