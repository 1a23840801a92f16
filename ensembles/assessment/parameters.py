"""Priors that differ in one or two named parameters."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from .. import checks
from ..priors.base import LinearGaussianPrior

__all__ = ["level_grid", "with_parameters"]


def with_parameters(prior: LinearGaussianPrior, values: Mapping[str, float]) -> LinearGaussianPrior:
    """The same prior with other values of some parameters, by name.

    A parameter given as one number is replaced. One given per axis or as a matrix keeps its shape and is scaled, so that
    the mean of its diagonal is the new value.

    Raises
    ------
    InputError
        If the prior has no such parameter, or cannot take the value.

    Examples
    --------
    >>> from ensembles import Brownian
    >>> with_parameters(Brownian(diffusion=[1.0, 3.0]), {"diffusion": 4.0})
    Brownian(diffusion=[2.0, 6.0])
    """
    parameters: dict[str, Any] = dict(prior.parameters())
    for name, value in values.items():
        if name not in parameters:
            raise checks.unknown_name(f"parameter of the prior {prior.kind!r}", name, list(parameters))
        old = np.asarray(parameters[name], dtype=float)
        if old.ndim == 0:
            parameters[name] = float(value)
            continue
        mean = float(np.mean(np.diag(old) if old.ndim == 2 else old))
        if mean == 0.0:
            raise checks.InputError(
                f"{name} cannot be scaled; its mean over the axes is 0 in {prior!r}; give the prior one number for it"
            )
        parameters[name] = (old * (float(value) / mean)).tolist()
    return type(prior)(**parameters)


def level_grid(
    prior: LinearGaussianPrior, levels: Sequence[float] | Mapping[str, Sequence[float]], parameter: str
) -> dict[str, np.ndarray]:
    """Check the levels of one or two parameters: known names, at least three increasing numbers each, positive where needed."""
    asked = dict(levels) if isinstance(levels, Mapping) else {parameter: levels}
    if not 1 <= len(asked) <= 2:
        raise checks.InputError(
            f"levels must be given for one or two parameters; they are for {len(asked)} ({', '.join(asked) or 'none'}); "
            "fix the others in the prior"
        )
    known = list(prior.parameters())
    grid = {}
    for name, values in asked.items():
        if name not in known:
            raise checks.unknown_name(f"parameter of the prior {prior.kind!r}", name, known)
        array = np.atleast_1d(checks.as_float_array(values, f"levels of {name}"))
        checks.require_finite(array, f"levels of {name}")
        if array.ndim != 1 or array.size < 3:
            raise checks.InputError(
                f"levels of {name} must be at least three numbers; their shape is {array.shape}; "
                "give a list that reaches beyond what is plausible on both sides"
            )
        if name == "diffusion" and (array <= 0).any():
            i = int(np.argmax(array <= 0))
            raise checks.InputError(
                f"levels of diffusion must be positive; levels[{i}] = {array[i]:g}; remove it, or give a small positive one"
            )
        if (np.diff(array) <= 0).any():
            i = int(np.argmax(np.diff(array) <= 0))
            raise checks.InputError(
                f"levels of {name} must increase; levels[{i}] = {array[i]:g} is followed by {array[i + 1]:g}; "
                "sort them and give each once"
            )
        grid[name] = array
    return grid
