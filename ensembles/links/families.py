"""Families of priors with free parameters, on scales where a curvature is a good summary.

Diffusion, rate and localisation error enter as logarithms, a matrix by its Cholesky factor with logarithms on the
diagonal, drift and centre in units that the data set.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from .. import checks
from ..priors.base import LinearGaussianPrior
from ..priors.brownian import Brownian
from ..priors.ornstein_uhlenbeck import OrnsteinUhlenbeck

__all__ = ["FAMILIES", "PriorFamily"]

FAMILIES = ("brownian", "ornstein-uhlenbeck")
_SHAPES = ("scalar", "axis", "matrix")


@dataclass(frozen=True)
class PriorFamily:
    """Which parameters of a prior are free.

    Attributes
    ----------
    kind : "brownian" or "ornstein-uhlenbeck".
    dimension : number of coordinates d.
    diffusion : "scalar", "axis" or "matrix".
    rate : "scalar" or "axis", of an Ornstein-Uhlenbeck prior.
    drift : whether a Brownian prior has a constant drift.
    localisation : whether the localisation error is free.
    speed, spread : units of drift (length/time) and of the centre (length); the centre is counted from `origin` (d,).
    """

    kind: str
    dimension: int
    diffusion: str
    rate: str
    drift: bool
    localisation: bool
    known_localisation: float
    speed: float
    spread: float
    origin: np.ndarray
    box: Any = None

    def __post_init__(self) -> None:
        if self.kind not in FAMILIES:
            raise checks.unknown_name("family", self.kind, list(FAMILIES))
        if self.diffusion not in _SHAPES:
            raise checks.unknown_name("shape of the diffusion", self.diffusion, list(_SHAPES))
        if self.rate not in _SHAPES[:2]:
            raise checks.unknown_name("shape of the rate", self.rate, list(_SHAPES[:2]))
        if self.kind == "ornstein-uhlenbeck" and self.drift:
            raise checks.InputError(
                "an Ornstein-Uhlenbeck prior has no constant drift; drift = True; its centre plays that part: leave drift out"
            )
        if self.kind == "ornstein-uhlenbeck" and self.box is not None:
            raise checks.InputError(
                "only a Brownian prior can live in a box; the family is 'ornstein-uhlenbeck'; leave one out"
            )

    @property
    def _blocks(self) -> list[tuple[str, int]]:
        d = self.dimension
        blocks = [("diffusion", {"scalar": 1, "axis": d, "matrix": d * (d + 1) // 2}[self.diffusion])]
        if self.kind == "brownian":
            blocks += [("drift", d)] * self.drift
        else:
            blocks += [("rate", d if self.rate == "axis" else 1), ("centre", d)]
        return blocks + [("localisation", 1)] * self.localisation

    @property
    def size(self) -> int:
        """Number of free parameters."""
        return sum(count for _, count in self._blocks)

    @property
    def names(self) -> list[str]:
        """Names of the free parameters in the order of `natural`: diffusion, diffusion[0, 1], rate, centre[0], ..."""
        names = []
        for name, count in self._blocks:
            if name == "diffusion" and self.diffusion == "matrix":
                names += [f"diffusion[{i}, {j}]" for i, j in zip(*np.tril_indices(self.dimension))]
            elif count == 1 and not (name in ("drift", "centre") or self._per_axis(name)):
                names.append(name)
            else:
                names += [f"{name}[{k}]" for k in range(count)]
        return names

    def _per_axis(self, name: str) -> bool:
        return (name == "diffusion" and self.diffusion == "axis") or (name == "rate" and self.rate == "axis")

    @property
    def logarithmic(self) -> np.ndarray:
        """Which free parameters are logarithms of natural ones (p,)."""
        flags: list[bool] = []
        for name, count in self._blocks:
            matrix = name == "diffusion" and self.diffusion == "matrix"
            flags += [name in ("diffusion", "rate", "localisation") and not matrix] * count
        return np.array(flags)

    def start(self, diffusion: float, rate: float, localisation: float) -> np.ndarray:
        """Free parameters of a diffusion coefficient, a rate and a localisation error; drift and centre in the middle."""
        parts = []
        for name, count in self._blocks:
            if name == "diffusion" and self.diffusion == "matrix":
                rows, columns = np.tril_indices(self.dimension)
                parts.append(np.where(rows == columns, 0.5 * np.log(diffusion), 0.0))
            else:
                value = {"diffusion": np.log(diffusion), "rate": np.log(rate), "localisation": np.log(localisation)}
                parts.append(np.full(count, value.get(name, 0.0)))
        return np.concatenate(parts)

    def _split(self, free: np.ndarray) -> dict[str, np.ndarray]:
        parts, start = {}, 0
        for name, count in self._blocks:
            parts[name] = free[start : start + count]
            start += count
        return parts

    def _diffusion(self, values: np.ndarray) -> np.ndarray:
        if self.diffusion == "matrix":
            factor = np.zeros((self.dimension, self.dimension))
            factor[np.tril_indices(self.dimension)] = values
            np.fill_diagonal(factor, np.exp(np.diag(factor)))
            return factor @ factor.T
        return np.exp(values) if self.diffusion == "axis" else np.exp(values[0])

    def build(self, free: np.ndarray) -> tuple[LinearGaussianPrior, float]:
        """The prior and the localisation error of free parameters (p,)."""
        parts = self._split(free)
        diffusion = self._diffusion(parts["diffusion"])
        localisation = float(np.exp(parts["localisation"][0])) if self.localisation else self.known_localisation
        if self.kind == "brownian":
            drift = self.speed * parts["drift"] if self.drift else None
            return Brownian(diffusion=diffusion, drift=drift, box=self.box), localisation
        rate = np.exp(parts["rate"]) if self.rate == "axis" else float(np.exp(parts["rate"][0]))
        centre = self.origin + self.spread * parts["centre"]
        return OrnsteinUhlenbeck(rate=rate, centre=centre, diffusion=diffusion), localisation

    def natural(self, free: np.ndarray) -> np.ndarray:
        """The parameters in their own units (p,), in the order of `names`."""
        parts = self._split(free)
        values = []
        for name, _ in self._blocks:
            if name == "diffusion":
                value = self._diffusion(parts[name])
                values.append(
                    value[np.tril_indices(self.dimension)] if self.diffusion == "matrix" else np.atleast_1d(value)
                )
            elif name == "drift":
                values.append(self.speed * parts[name])
            elif name == "centre":
                values.append(self.origin + self.spread * parts[name])
            else:
                values.append(np.exp(parts[name]))
        return np.concatenate(values)
