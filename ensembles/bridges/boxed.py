"""The bridge over one gap when particles live in a box: potentials by images, paths folded at the walls."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from .. import checks
from ..kernels.dense import DenseKernel
from ..kernels.images import box_kernel
from ..priors.base import Transition
from ..priors.box import Box
from ..priors.pinned import PinnedLaw
from .coupling import Coupling
from .gap import Gap
from .images import BoxLaw, draw_images

if TYPE_CHECKING:
    import pandas

    from ..priors.base import LinearGaussianPrior

__all__ = ["BoxCoupling", "BoxGap", "gap_kernel"]

_LARGEST = 60_000_000  # entries of the kernel, 0.5 GB
_MOMENT_DRAWS = 50_000


def gap_kernel(prior: LinearGaussianPrior, step: Transition, start: np.ndarray, end: np.ndarray) -> DenseKernel:
    """The kernel of a prior in a box between two clouds (n, d) and (m, d).

    Raises
    ------
    InputError
        If a position lies outside the box, or the clouds have more than 60 million pairs.
    """
    box = prior.box
    assert box is not None
    if len(start) * len(end) > _LARGEST:
        raise checks.InputError(
            f"the clouds are too large for a box; they have {len(start)} x {len(end)} pairs where {_LARGEST} fit; "
            "draw fewer particles of each"
        )
    law = BoxLaw(box, step)
    return box_kernel(law.walls, law.sources(start), law.targets(end))


@dataclass(frozen=True)
class _FoldedLaw:
    """A pinned law whose draws are folded into the box."""

    law: PinnedLaw
    box: Box

    def sample(self, start: np.ndarray, end: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        """One draw for each pair of rows, in the box."""
        return self.box.fold(self.law.sample(start, end, rng))


@dataclass(frozen=True, eq=False)
class BoxGap(Gap):
    """One gap under a prior in a box; drawn ends and paths are in unbounded space, the rest in the box."""

    @property
    def box(self) -> Box:
        """The prior's box."""
        assert self.prior.box is not None
        return self.prior.box

    @cached_property
    def box_log_kernel(self) -> np.ndarray:
        """log k (n, m), without the prior's normaliser."""
        return gap_kernel(self.prior, self.transition, *self.clouds).log_kernel

    def ahead(self, t: float, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log φ_t (m,) and its gradient (m, d), by images."""
        law = BoxLaw(self.box, self.after(t))
        weights = self.log_q - self.transition.log_normaliser
        return law.log_sum(points, self.clouds[1], weights, forward=False)

    def behind(self, t: float, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log φ̂_t (m,) and its gradient (m, d), by images."""
        return BoxLaw(self.box, self.before(t)).log_sum(points, self.clouds[0], self.log_p, forward=True)

    def log_density(self, t: float, points: np.ndarray) -> np.ndarray:
        """log ρ_t (m,): -inf outside the box."""
        closed = np.array([kind != "open" for kind in self.box.boundary])
        outside = (closed & ((points < self.box.lower) | (points > self.box.upper))).any(axis=1)
        return np.where(outside, -np.inf, super().log_density(t, points))

    def moments(self, t: float) -> tuple[np.ndarray, np.ndarray]:
        """Mean and covariance of places in the box, from 50 000 draws with a fixed seed: folding has no closed form."""
        rng = np.random.default_rng(0)
        starts, rows = self.draw_starts(_MOMENT_DRAWS, rng)
        ends, _ = self.draw_on(self.times[0], starts, rows, rng)
        drawn = self.pinned(t).sample(starts, ends, rng)
        return drawn.mean(axis=0), np.cov(drawn.T).reshape(self.dimension, self.dimension)

    def end_moments(self, last: bool) -> tuple[np.ndarray, np.ndarray]:
        """Mean and covariance of the cloud at the start of the gap or, with `last`, at its end."""
        cloud, weights = self.clouds[int(last)], self.weights[int(last)]
        centred = cloud - weights @ cloud
        return weights @ cloud, (centred.T * weights) @ centred

    def pinned(self, t: float) -> _FoldedLaw:  # type: ignore[override]
        """The prior at t given both ends in unbounded space; draws are folded."""
        return _FoldedLaw(super().pinned(t), self.box)

    def conditional_end(self, t: float, points: np.ndarray):  # type: ignore[no-untyped-def]
        """Refused: a mixture of images has no table of its own."""
        raise checks.InputError(
            f"the law of the end is not available in a box; asked at t = {t:g}; draw ends with sample_paths_from"
        )

    def draw_on(
        self, t: float, begin: np.ndarray, rows: np.ndarray, rng: np.random.Generator
    ) -> tuple[np.ndarray, np.ndarray]:
        """An image of an end for each point at t, so that the path to it is continuous, and the end's row number."""
        step = self.after(t)
        if t == self.times[0] and (rows >= 0).all():
            log_rows, which = self.box_log_kernel, rows
        else:
            law = BoxLaw(self.box, step)
            log_rows = box_kernel(law.walls, law.sources(begin), law.targets(self.clouds[1])).log_kernel
            which = np.arange(len(begin))
        ends = np.empty(len(begin), dtype=np.int64)
        uniforms = rng.random(len(begin))
        for first in range(0, len(begin), 1000):
            part = slice(first, first + 1000)
            logs = log_rows[which[part]] + self.log_q
            sums = np.cumsum(np.exp(logs - logs.max(axis=1, keepdims=True)), axis=1)
            ends[part] = (uniforms[part, None] * sums[:, -1:] >= sums).sum(axis=1)
        return draw_images(self.box, step, begin, self.clouds[1][ends], rng), ends


@dataclass(frozen=True)
class BoxCoupling(Coupling):
    """The coupling between two snapshots in a box; its kernel is that of `gap`, as a matrix."""

    gap: BoxGap | None = None

    @property
    def shape(self) -> tuple[int, int]:
        """Particles in the earlier and the later snapshot."""
        return self.log_p.size, self.log_q.size

    def matrix(self) -> np.ndarray:
        """All of π, (n, m)."""
        assert self.gap is not None
        return np.exp(self.gap.box_log_kernel + self.log_p[:, None] + self.log_q[None, :])

    def row(self, i: int) -> np.ndarray:
        """Row i of π, (m,)."""
        assert self.gap is not None
        if not -self.shape[0] <= i < self.shape[0]:
            raise checks.InputError(
                f"no such row; row {i} of a coupling with {self.shape[0]} sources; use 0 to {self.shape[0] - 1}"
            )
        return np.exp(self.gap.box_log_kernel[i] + self.log_p[i] + self.log_q)

    def top_links(self, count: int = 3) -> pandas.DataFrame:
        """The `count` most probable targets of every source; see `Coupling.top_links`."""
        import pandas

        count = min(checks.whole_number(count, "count"), self.shape[1])
        table = self.matrix()
        targets = np.argsort(-table, axis=1, kind="stable")[:, :count]
        mass = np.take_along_axis(table, targets, axis=1)
        with np.errstate(invalid="ignore"):
            probability = mass / table.sum(axis=1, keepdims=True)
        return pandas.DataFrame({
            "source": np.repeat(np.arange(self.shape[0]), count), "target": targets.ravel(),
            "probability": np.nan_to_num(probability).ravel(), "mass": mass.ravel(),
        })  # fmt: skip

    def expectation(self, values: np.ndarray) -> np.ndarray:
        """Σ_j π_ij values_j / Σ_j π_ij for every source."""
        table = self.matrix()
        return (table / table.sum(axis=1, keepdims=True)) @ np.asarray(values, dtype=float)

    def expectation_of_sources(self, values: np.ndarray) -> np.ndarray:
        """Σ_i π_ij values_i / Σ_i π_ij for every target."""
        table = self.matrix()
        return (table / table.sum(axis=0)).T @ np.asarray(values, dtype=float)

    def draw_sources(self, targets: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        """One source for each target row number, drawn with probability ∝ π_ij."""
        sums = np.cumsum(self.matrix()[:, targets], axis=0)
        return np.asarray((rng.random(targets.size) * sums[-1] >= sums).sum(axis=0))
