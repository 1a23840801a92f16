"""The study file: which data, which prior, how to solve, what to write. TOML, checked as a whole at once."""

from __future__ import annotations

import inspect
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field
from os import PathLike
from pathlib import Path
from typing import Any

import numpy as np
from pydantic import ValidationError

from . import checks
from .priors.base import LinearGaussianPrior
from .priors.registry import PRIORS, build_prior
from .snapshots.files import read_snapshots
from .snapshots.growth import Growth
from .snapshots.scaling import Scaling, fit_scaling
from .snapshots.series import SnapshotSeries
from .study_links import BoxTable, LinksTable, box_problems, links_problems, with_numbers
from .study_problems import Problem, line_of, problem_of, refuse, syntax_line, unknown_key
from .study_tables import (
    DataTable,
    GrowthTable,
    HoldOutTable,
    NoiseTable,
    OutputTable,
    PriorTable,
    ScalingTable,
    SolveTable,
    Tables,
    UnitsTable,
)

__all__ = ["Study", "read_study"]


@dataclass(frozen=True)
class Study:
    """A study file that was read and found in order.

    Attributes
    ----------
    path : Path, where it stands; the data file is looked up from its folder.
    text : str, as it was read.
    title, seed, data, units, prior, solve, output, holdout, noise, links, box, scaling, growth : its tables; title, seed
        and identity are those of [study].
    """

    path: Path
    text: str
    title: str
    seed: int
    data: DataTable
    units: UnitsTable
    prior: PriorTable
    solve: SolveTable
    output: OutputTable
    holdout: HoldOutTable
    noise: NoiseTable
    identity: str = "lost"
    links: LinksTable = field(default_factory=LinksTable)
    box: BoxTable = field(default_factory=BoxTable)
    scaling: ScalingTable = field(default_factory=ScalingTable)
    growth: GrowthTable | None = None

    @property
    def data_file(self) -> Path:
        """Where the data stand."""
        return self.path.parent / self.data.file

    def read_series(self) -> SnapshotSeries:
        """Read the snapshots, in the coordinates that are fitted: scaled where the study says so.

        Raises
        ------
        InputError
            If the file or one of its columns is missing, or a value in it cannot be used.
        """
        original = self.read_original()
        return self.fit_scaling(original).scale(original)

    def read_original(self) -> SnapshotSeries:
        """The snapshots in the file's own coordinates."""
        features = list(self.data.features)
        rates = () if self.growth is None else (self.growth.rate, self.growth.birth, self.growth.death)
        features += [name for name in rates if isinstance(name, str) and name not in features]
        series = read_snapshots(
            self.data_file,
            time=self.data.time,
            position=None if self.data.position is None else list(self.data.position),
            weight=self.data.weight,
            label=self.data.label,
            features=features,
            units={"time": self.units.time, "length": self.units.length},
        )
        if self.growth is not None:
            series = series.with_growth(Growth(**self.growth.model_dump(exclude={"estimate"})))
        return series

    def fit_scaling(self, original: SnapshotSeries) -> Scaling:
        """The way from the file's coordinates to those of the fit, and back."""
        return fit_scaling(
            original, self.scaling.kind, components=self.scaling.components, snapshots=self._fitted_on(original)
        )

    def _fitted_on(self, series: SnapshotSeries) -> list[int] | None:
        """Numbers of the snapshots at the times of scaling.fit."""
        found = []
        for t in self.scaling.fit:
            at = np.flatnonzero(series.times == t)
            if not at.size:
                raise checks.InputError(
                    f"no snapshot to fit the scaling on; scaling.fit holds {t:g} and the times are "
                    f"{', '.join(f'{time:g}' for time in series.times)}; name some of these"
                )
            found.append(int(at[0]))
        return found or None

    def build_prior(self) -> LinearGaussianPrior:
        """Build the prior of [prior], in the box of [box]."""
        box = self.box.build()
        return build_prior(self.prior.kind, self.prior.parameters | ({} if box is None else {"box": box}))


def read_study(path: str | PathLike[str]) -> Study:
    """Read a study file and check all of it.

    Parameters
    ----------
    path : path of a TOML file with the tables [data] and [prior], and if wanted [study], [units], [scaling], [growth],
        [solve], [output], [holdout], [noise].

    Raises
    ------
    InputError
        If the file is missing, is no TOML, or a table, key or value is unknown, missing or wrong. Every problem of the
        file is listed with its line.

    Examples
    --------
    >>> import tempfile
    >>> file = Path(tempfile.mkdtemp()) / "study.toml"
    >>> _ = file.write_text('''
    ... [data]
    ... file = "beads.csv"
    ... time = "t_s"
    ... position = ["x_um", "y_um"]
    ... [prior]
    ... kind = "brownian"
    ... diffusion = 0.43
    ... ''')
    >>> read_study(file).build_prior()
    Brownian(diffusion=0.43)
    """
    place = Path(path)
    text = _read_text(place)
    try:
        content = tomllib.loads(text)
    except tomllib.TOMLDecodeError as cause:
        refuse(place, [Problem(syntax_line(str(cause)), f"not a TOML file; {cause}; correct that line")])
    content, problems = with_numbers(content, text)
    tables = _known_keys(content)
    found = None
    try:
        found = Tables.model_validate(content)
    except ValidationError as cause:
        # Rules of a union or a container can report one key twice; a key is named once.
        errors = {tuple(error["loc"]): error for error in cause.errors(include_url=False)}
        problems += [problem_of(text, error, tables) for error in errors.values()]
    if not problems:
        problems += box_problems(content, text) + links_problems(content, text)
    problems += _unnamed_columns(content, text) + _prior_problems(content, text, tables)
    refuse(place, problems)
    assert found is not None  # refuse() raised otherwise
    return Study(
        path=place,
        text=text,
        title=found.study.title,
        seed=found.study.seed,
        data=found.data,
        units=found.units,
        prior=found.prior,
        solve=found.solve,
        output=found.output,
        holdout=found.holdout,
        noise=found.noise,
        identity=found.study.identity,
        links=found.links,
        box=found.box,
        scaling=found.scaling,
        growth=found.growth,
    )


def _read_text(path: Path) -> str:
    try:
        return path.read_text(encoding="utf-8")
    except FileNotFoundError:
        raise checks.InputError(f"study file not found; {str(path)!r}; check its path") from None
    except IsADirectoryError:
        raise checks.InputError(f"the study file is a folder; {str(path)!r}; name the .toml file in it") from None
    except UnicodeDecodeError as cause:
        raise checks.InputError(f"the study file is not text; {str(path)!r}: {cause}; save it as UTF-8") from None
    except OSError as cause:
        raise checks.InputError(f"the study file cannot be read; {str(path)!r}: {cause.strerror}; check it") from None


def _known_keys(content: Mapping[str, Any]) -> dict[str, list[str]]:
    """The known keys of every table; those of [prior] depend on its kind."""
    keys = {
        name: list((GrowthTable if name == "growth" else field.annotation).model_fields)  # type: ignore[union-attr]
        for name, field in Tables.model_fields.items()
    }
    prior = content.get("prior")
    kind = prior.get("kind") if isinstance(prior, Mapping) else None
    if isinstance(kind, str) and kind in PRIORS:
        keys["prior"] += [name for name in inspect.signature(PRIORS[kind]).parameters if name != "box"]
    else:
        keys["prior"] += sorted(
            {name for prior in PRIORS.values() for name in inspect.signature(prior).parameters} - {"box"}
        )
    return keys


def _unnamed_columns(content: Mapping[str, Any], text: str) -> list[Problem]:
    data = content.get("data")
    if not isinstance(data, Mapping) or str(data.get("file")).endswith((".npz", ".h5ad")):
        return []
    line = line_of(text, ["data"])
    examples = {"time": '"t"', "position": '["x", "y"]'}
    return [
        Problem(line, f"missing key; [data] has no {name!r}; add a line such as: {name} = {example}")
        for name, example in examples.items()
        if name not in data
    ]


def _is_number(value: Any) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool)


def _holds_numbers(value: Any) -> bool:
    """A number, a list of numbers, or a list of lists of numbers: what a parameter of a prior may be."""
    if not isinstance(value, list):
        return _is_number(value)
    return bool(value) and all(_is_number(item) or (isinstance(item, list) and _holds_numbers(item)) for item in value)


def _prior_problems(content: Mapping[str, Any], text: str, tables: Mapping[str, list[str]]) -> list[Problem]:
    """What is wrong with the parameters of [prior]; that the table and its `kind` are there is checked elsewhere."""
    table = content.get("prior")
    if not isinstance(table, Mapping) or not isinstance(table.get("kind"), str):
        return []
    kind = table["kind"]
    if kind not in PRIORS:
        return [Problem(line_of(text, ["prior", "kind"]), str(checks.unknown_name("prior.kind", kind, list(PRIORS))))]
    given = {name: value for name, value in table.items() if name != "kind"}
    problems = [_unknown_parameter(kind, name, text, tables) for name in given if name not in tables["prior"]]
    for name, parameter in inspect.signature(PRIORS[kind]).parameters.items():
        line = line_of(text, ["prior", name])
        if name not in given:
            if parameter.default is parameter.empty:
                message = f"missing key; [prior] has no {name!r}, which {kind!r} needs; add a line: {name} = ..."
                problems.append(Problem(line_of(text, ["prior"]), message))
        elif not _holds_numbers(given[name]):
            message = f"wrong value; prior.{name} = {given[name]!r}; it should be a number or a list of numbers"
            problems.append(Problem(line, message))
    return problems or _refused_by_prior(kind, given, content, text)


def _unknown_parameter(kind: str, name: str, text: str, tables: Mapping[str, list[str]]) -> Problem:
    others = [other for other, prior in PRIORS.items() if name in inspect.signature(prior).parameters]
    if not others:
        return unknown_key(text, ["prior", name], tables)
    message = f"key of another prior; {name!r} does not belong to kind {kind!r}; remove it, or use kind = {others[0]!r}"
    return Problem(line_of(text, ["prior", name]), message)


def _refused_by_prior(kind: str, given: dict[str, Any], content: Mapping[str, Any], text: str) -> list[Problem]:
    """What the prior itself says of its values, and of their number when the position columns are known."""
    try:
        prior = build_prior(kind, given)
        data = content.get("data")
        # Components and scaled coordinates are counted when the data are read.
        table = data if isinstance(data, Mapping) else {}
        counted = not str(table.get("file")).endswith(".h5ad") and "scaling" not in content
        position = table.get("position")
        if counted and isinstance(position, list) and position:
            prior.linear_drift(len(position))
            prior.diffusion_matrix(len(position))
    except checks.InputError as cause:
        message = str(cause)
        name = next((name for name in given if message.startswith(name)), "kind")
        return [Problem(line_of(text, ["prior", name]), f"prior.{message}" if name != "kind" else message)]
    return []
