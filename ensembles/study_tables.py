"""The tables of a study file: their keys, the types of their values and the defaults."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field

from .study_links import BoxTable, LinksTable

__all__ = [
    "DataTable",
    "GrowthTable",
    "HoldOutTable",
    "NoiseTable",
    "OutputTable",
    "PriorTable",
    "ScalingTable",
    "SolveTable",
    "StudyTable",
    "Tables",
    "UnitsTable",
]

_Names = Annotated[
    tuple[str, ...], Field(strict=False), BeforeValidator(lambda value: [value] if isinstance(value, str) else value)
]
"""A list of names, or one name."""


class _Table(BaseModel):
    """A table of the study file: no key but the known ones, no silent conversion, nothing changed afterwards."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


class StudyTable(_Table):
    """[study]: what it is called, the seed of its random numbers, and identity: are the "same" particles in all frames?"""

    title: str = ""
    seed: int = Field(default=0, ge=0)
    identity: Literal["lost", "same"] = "lost"


class DataTable(_Table):
    """[data]: the file, looked up from the folder of the study file, and what its columns mean.

    An .npz archive names its own columns, an .h5ad file has one key of .obsm as its position; any other file needs `time`
    and `position`.
    """

    file: str = Field(min_length=1)
    time: str | None = None
    position: _Names | None = Field(default=None, min_length=1)
    weight: str | None = None
    label: str | None = None
    features: _Names = ()


class UnitsTable(_Table):
    """[units]: words for tables and axes; nothing is converted."""

    time: str = ""
    length: str = ""


class SolveTable(_Table):
    """[solve]: the L1 error of the marginals to reach, and the largest number of sweeps (default: the solver's own)."""

    tolerance: float = Field(default=1e-6, gt=0, allow_inf_nan=False)
    sweeps: int | None = Field(default=None, ge=1)


class OutputTable(_Table):
    """[output]: how much is written, and how; `repeats` are the resamples for standard errors of lineages, 0 for none."""

    paths: int = Field(default=200, ge=1)
    path_times: int = Field(default=41, ge=2)
    intermediate: int = Field(default=5, ge=1)
    format: Literal["csv", "parquet"] = "csv"
    links: int = Field(default=3, ge=1)
    repeats: int = Field(default=20, ge=0)


class ScalingTable(_Table):
    """[scaling]: of the coordinates before the fit, whose prior is then in scaled units; `fit` names times, all if left out."""

    kind: Literal["none", "standardise", "pca", "whiten"] = "none"
    components: int | None = Field(default=None, ge=1)
    fit: Annotated[tuple[float, ...], Field(strict=False)] = Field(default=(), min_length=0)


class GrowthTable(_Table):
    """[growth]: net rate, or birth and death (a feature's name or a number), and how well they are known; see `Growth`.

    With `estimate` the rates are those of `estimate_growth`, which starts from the given ones; an uncertainty above 0 is then
    its standard deviation, where otherwise the evidence chooses.
    """

    rate: str | float | None = None
    birth: str | float | None = None
    death: str | float | None = None
    uncertainty: float = Field(default=0.0, ge=0, allow_inf_nan=False)
    later: float = Field(default=0.0, ge=0, allow_inf_nan=False)
    estimate: bool = False


class HoldOutTable(_Table):
    """[holdout]: draws from each prediction, resamples and simulations, and the feature that names replicates."""

    draws: int = Field(default=1000, ge=2)
    repeats: int = Field(default=100, ge=2)
    simulations: int = Field(default=199, ge=19)
    replicates: str | None = None


class NoiseTable(BaseModel):
    """[noise]: names of one or two parameters of the prior, each with the list of levels to try."""

    model_config = ConfigDict(frozen=True, extra="allow", strict=True)

    @property
    def levels(self) -> dict[str, Any]:
        """Name -> levels; empty if nothing is to be profiled."""
        return dict(self.model_extra or {})


class PriorTable(BaseModel):
    """[prior]: its kind, and the parameters of that kind, which the prior itself checks."""

    model_config = ConfigDict(frozen=True, extra="allow", strict=True)
    kind: str

    @property
    def parameters(self) -> dict[str, Any]:
        """Every key but `kind`."""
        return dict(self.model_extra or {})


class Tables(_Table):
    """The whole file."""

    study: StudyTable = StudyTable()
    data: DataTable
    units: UnitsTable = UnitsTable()
    scaling: ScalingTable = ScalingTable()
    growth: GrowthTable | None = None
    prior: PriorTable
    solve: SolveTable = SolveTable()
    output: OutputTable = OutputTable()
    holdout: HoldOutTable = HoldOutTable()
    noise: NoiseTable = NoiseTable()
    links: LinksTable = LinksTable()
    box: BoxTable = BoxTable()
