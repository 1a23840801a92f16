"""Smooth potentials as plain arrays and back: the part of a bridge's file that they need."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..endpoints.atoms import AtomPotential
from ..endpoints.base import Potential
from ..endpoints.mixture import MixturePotential
from ..endpoints.quadratic import QuadraticMixture
from .smooth import SmoothSolution

__all__ = ["pack_solution", "unpack_solution"]


def pack_solution(solution: SmoothSolution, k: int) -> tuple[dict[str, Any], dict[str, np.ndarray]]:
    """Header entry and arrays of gap k."""
    entry = {
        "kind": solution.kind,
        "log_likelihood": solution.log_likelihood,
        "iterations": solution.iterations,
        "notes": list(solution.notes),
    }
    arrays = {f"chosen_{k}": solution.chosen, f"history_{k}": solution.history}
    for name, potential in (("initial", solution.initial), ("terminal", solution.terminal)):
        arrays |= {f"{name}_{part}_{k}": array for part, array in _parts(potential).items()}
    return entry, arrays


def unpack_solution(entry: dict[str, Any], arrays: dict[str, np.ndarray], k: int) -> SmoothSolution:
    """The solution of gap k."""
    return SmoothSolution(
        _potential(arrays, "initial", k),
        _potential(arrays, "terminal", k),
        entry["kind"],
        entry["log_likelihood"],
        arrays[f"chosen_{k}"],
        entry["iterations"],
        arrays[f"history_{k}"],
        tuple(entry["notes"]),
    )


def _parts(potential: Potential) -> dict[str, np.ndarray]:
    if isinstance(potential, AtomPotential):
        return {"points": potential.points, "log_weights": potential.log_weights}
    assert isinstance(potential, MixturePotential)
    mixture = potential.mixture
    return {
        "centre": potential.centre,
        "basis": potential.basis,
        "log_weights": mixture.log_weights,
        "linear": mixture.linear,
        "precision": mixture.precision,
    }


def _potential(arrays: dict[str, np.ndarray], name: str, k: int) -> Potential:
    def part(of: str) -> np.ndarray:
        return arrays[f"{name}_{of}_{k}"]

    if f"{name}_points_{k}" in arrays:
        return AtomPotential(part("points"), part("log_weights"))
    mixture = QuadraticMixture(part("log_weights"), part("linear"), part("precision"))
    return MixturePotential(part("centre"), part("basis"), mixture)
