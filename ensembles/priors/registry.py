"""The one list of priors, by their names in study files and saved bridges."""

from __future__ import annotations

from typing import Any

from .. import checks
from .base import LinearGaussianPrior
from .brownian import Brownian
from .ornstein_uhlenbeck import OrnsteinUhlenbeck

__all__ = ["PRIORS", "build_prior"]

PRIORS: dict[str, type[LinearGaussianPrior]] = {prior.kind: prior for prior in (Brownian, OrnsteinUhlenbeck)}


def build_prior(kind: str, parameters: dict[str, Any]) -> LinearGaussianPrior:
    """Build the prior of that name.

    Raises
    ------
    InputError
        If no prior has that name, or it has no such parameter.
    """
    if kind not in PRIORS:
        raise checks.unknown_name("prior", kind, list(PRIORS))
    try:
        return PRIORS[kind](**parameters)
    except TypeError as cause:
        raise checks.InputError(
            f"the parameters of the prior {kind!r} do not fit; {cause}; give {kind} its own parameters only"
        ) from None
