"""The tables of a study file about the same particles in every frame, boxes, and values with units."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field

from . import checks
from .priors.box import Box
from .quantities import DIMENSIONS, read_quantity
from .study_problems import Problem, line_of

__all__ = ["BoxTable", "LinksTable", "box_problems", "links_problems", "with_numbers"]

_Edges = Annotated[tuple[float, ...], Field(strict=False)] | float | None
_Boundaries = Annotated[tuple[str, ...], Field(strict=False)] | str


class LinksTable(BaseModel):
    """[links], for identity = "same": detection probability, birth density, localisation error, and which prior links.

    `prior` is "given" (that of [prior]) or "estimated" (its parameters from the unlabelled frames themselves). `correlation`
    (of neighbours' displacements) and `hold_spread` are those of `LinkOptions`, for particles that do not move independently.
    """

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)
    detection: float | None = Field(default=None, gt=0, le=1)
    birth_density: float | None = Field(default=None, gt=0)
    localisation: float = Field(default=0.0, ge=0)
    prior: Literal["given", "estimated"] = "given"
    correlation: float = Field(default=0.0, ge=0, lt=1)
    hold_spread: bool = False
    alternatives: int = Field(default=3, ge=1)


class BoxTable(BaseModel):
    """[box]: lower and upper edges of every position column, and boundary: "periodic", "reflecting", "open", or a list."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)
    lower: _Edges = None
    upper: _Edges = None
    boundary: _Boundaries = "periodic"

    def build(self) -> Box | None:
        """The box, or none where the table is absent."""
        if self.lower is None and self.upper is None:
            return None
        if self.lower is None or self.upper is None:
            missing = "lower" if self.lower is None else "upper"
            raise checks.InputError(f"a box needs both edges; [box] has no {missing!r}; add a line: {missing} = [...]")
        return Box(self.lower, self.upper, self.boundary)


def _has_unit(value: Any) -> bool:
    if isinstance(value, list):
        return any(map(_has_unit, value))
    begins_with_a_number = isinstance(value, str) and value.strip()[:1] in set("0123456789.+-")
    return begins_with_a_number and any(letter.isalpha() and letter not in "eE" for letter in value)


def with_numbers(content: Mapping[str, Any], text: str) -> tuple[dict[str, Any], list[Problem]]:
    """The content with every text such as "0.43 um^2/s" in [prior], [box] and [links] as a number in the study's units."""
    units = content.get("units")
    named = units if isinstance(units, Mapping) else {}
    time, length = (str(named.get(key, "")) for key in ("time", "length"))
    changed, problems = dict(content), []
    for table in ("prior", "box", "links"):
        values = content.get(table)
        if not isinstance(values, Mapping):
            continue
        read = dict(values)
        for name, value in values.items():
            if name not in DIMENSIONS or not _has_unit(value):
                continue
            try:
                read[name] = read_quantity(value, name, time, length)
            except checks.InputError as cause:
                problems.append(Problem(line_of(text, [table, name]), f"{table}.{cause}"))
                read[name] = 1.0  # stands in, so that one mistake is reported once
        changed[table] = read
    return changed, problems


def links_problems(content: Mapping[str, Any], text: str) -> list[Problem]:
    """A table [links] in a study whose individuals are lost, which would be ignored."""
    study = content.get("study")
    identity = study.get("identity", "lost") if isinstance(study, Mapping) else "lost"
    if "links" not in content or identity != "lost":
        return []
    message = (
        "[links] is for the same particles in every frame; identity is 'lost'; set identity = 'same', or remove it"
    )
    return [Problem(line_of(text, ["links"]), message)]


def box_problems(content: Mapping[str, Any], text: str) -> list[Problem]:
    """What is wrong with [box] beyond the types of its values."""
    table = content.get("box")
    if not isinstance(table, Mapping):
        return []
    try:
        box = BoxTable.model_validate(dict(table)).build()
    except checks.InputError as cause:
        return [Problem(line_of(text, ["box"]), str(cause))]
    except ValueError:
        return []  # a wrong type or key, reported with the others
    prior, data = content.get("prior"), content.get("data")
    kind = prior.get("kind") if isinstance(prior, Mapping) else None
    if box is not None and kind != "brownian":
        message = (
            f"only a Brownian prior can live in a box; prior.kind is {kind!r}; remove [box], or use kind = 'brownian'"
        )
        return [Problem(line_of(text, ["box"]), message)]
    position = data.get("position") if isinstance(data, Mapping) else None
    if box is not None and isinstance(position, list) and len(position) != box.dimension:
        message = (
            f"the box has the wrong dimension; it has {box.dimension} axes and there are {len(position)} position columns; "
            "give one edge for each"
        )
        return [Problem(line_of(text, ["box"]), message)]
    return []
