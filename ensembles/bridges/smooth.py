"""What a fit with smooth ends is asked for, and what it returns for one gap."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from .. import checks
from ..endpoints.base import Potential
from ..endpoints.covariance import parametrisation
from ..schrodinger.solution import Certificate, Outcome

__all__ = ["KernelEnds", "MixtureEnds", "SmoothSolution"]

BEGINNINGS = ("clusters", "coupling", "both")


@dataclass(frozen=True, kw_only=True)
class MixtureEnds:
    """Ends that are sums of Gaussian components, fitted by maximum likelihood; `ends="mixture"` is `MixtureEnds()`.

    Attributes
    ----------
    covariance : "diagonal" (along the axes of the whitened coordinates, those of the data for a Brownian prior with one
        diffusion coefficient, or one an axis), "full", or "low-rank" plus diagonal.
    rank : of the low-rank part.
    begin : where a fit starts: "clusters" of the end cloud, the Sinkhorn "coupling" of a subsample, or "both".
    repeats : further starts from other clusterings; the best likelihood is kept.
    smooth_start : also replace the particles of the start cloud by a mixture, so that the density exists there too.
    most : largest number of components tried where none is given.
    rng : seed of clusterings and of held-out parts.
    """

    covariance: str = "diagonal"
    rank: int = 1
    begin: str = "both"
    repeats: int = 1
    smooth_start: bool = True
    most: int = 30
    rng: int = 0

    def __post_init__(self) -> None:
        parametrisation(self.covariance, 1, max(1, self.rank), self.rank)
        if self.begin not in BEGINNINGS:
            raise checks.unknown_name("begin", self.begin, BEGINNINGS)
        checks.whole_number(self.repeats, "repeats")
        checks.whole_number(self.most, "most")


@dataclass(frozen=True, kw_only=True)
class KernelEnds:
    """Ends that are sums of equal round kernels w_k N(y | centre_k, bandwidth²); `ends="kernel"` is `KernelEnds()`.

    Attributes
    ----------
    centres : (K, d) in length, for the end cloud of every gap; by default particles of that cloud.
    bandwidth : standard deviation of a kernel in length; by default chosen by held-out likelihood, for each cloud.
    smooth_start : also replace the particles of the start cloud by kernels.
    rng : seed of the choice of centres and of held-out parts.
    """

    centres: Any = None
    bandwidth: float | None = None
    smooth_start: bool = True
    rng: int = 0

    def __post_init__(self) -> None:
        if self.centres is not None:
            object.__setattr__(self, "centres", checks.points(self.centres, "centres"))
        if self.bandwidth is not None:
            remedy = "give a length above 0, or None to choose it by held-out likelihood; for 0 use ends='atoms'"
            object.__setattr__(self, "bandwidth", checks.positive_number(self.bandwidth, "bandwidth", remedy))


@dataclass(frozen=True, eq=False)
class SmoothSolution:
    """The potentials of one gap with smooth ends, and how they were found.

    Attributes
    ----------
    initial, terminal : potentials; ρ_t = φ_t φ̂_t has mass 1.
    kind : "mixture" or "kernel".
    log_likelihood : J, mean log φ over the end cloud minus mean log (φ carried back) over the start cloud, in nats: the
        relative entropy of the bridge to the prior from the same start, estimated on the two clouds.
    chosen : table (tries, 3) of what was tried, components or bandwidth, its held-out J up to a constant shared by all tries,
        and a standard error (of the difference to the best, of J itself); empty where it was given.
    iterations, history : of the last fit: (looks, 2) iteration and J.
    notes : sentences worth knowing: the choice made, components that rest on one point, subsamples used.
    """

    initial: Potential
    terminal: Potential
    kind: str
    log_likelihood: float
    chosen: np.ndarray
    iterations: int
    history: np.ndarray = field(repr=False)
    notes: tuple[str, ...] = ()
    outcome: Outcome = Outcome.CONVERGED

    @property
    def components(self) -> tuple[int, int]:
        """Components of the initial and of the terminal potential; an initial one of atoms counts its particles."""
        first = getattr(self.initial, "count", None)
        return (len(self.initial.points) if first is None else first), self.terminal.count  # type: ignore[attr-defined]

    @property
    def certificate(self) -> Certificate:
        """Not a number throughout: a likelihood is maximised, no coupling between particles is solved for."""
        nothing = [float("nan")] * 9
        return Certificate(*nothing)

    @property
    def message(self) -> str:
        """One sentence."""
        starts, ends = self.components
        what = "kernels" if self.kind == "kernel" else "components"
        return (
            f"{self.kind} ends of {ends} {what} (start: {starts}) after {self.iterations} iterations; relative entropy "
            f"{self.log_likelihood:.6g} nats"
        )
