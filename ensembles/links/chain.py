"""Identities through many frames: links of consecutive gaps chained by forward and backward passes.

Under a Markov prior with positions known at the frames the assignments of different gaps are independent given the
frames, so the identity of one particle is a Markov chain over frames with the link probabilities as its steps:

    forward_k(i, j) = P(particle i of the first frame is j of frame k),   backward_k(j, l) likewise to the last one,
    P(through j at k | i to l) = forward_k(i, j) backward_k(j, l) / Σ_j' ...

A particle that is missed at a frame has left for good: the chain does not pick it up again.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy.sparse import csr_matrix, identity

from .. import checks
from ..bridges.images import draw_images
from ..bridges.paths import Paths
from ..priors.base import LinearGaussianPrior
from ..priors.pinned import pinned_steps
from .particle_links import ParticleLinks

if TYPE_CHECKING:
    from ..snapshots.series import SnapshotSeries

__all__ = ["LinkChain", "chain_links"]

_AMBIGUOUS = 0.5


@dataclass(frozen=True, eq=False, repr=False)
class LinkChain:
    """Who is who through all frames; made by `chain_links`. These are inferences under the prior, not observed tracks."""

    series: SnapshotSeries
    prior: LinearGaussianPrior
    links: tuple[ParticleLinks, ...]

    def _frame(self, number: int) -> int:
        count = len(self.series)
        if isinstance(number, bool) or not isinstance(number, (int, np.integer)) or not -count <= number < count:
            raise checks.InputError(f"no such frame; frame {number!r} of {count}; use 0 to {count - 1}")
        return int(number) % count

    def probabilities(self, start: int = 0, end: int = -1) -> csr_matrix:
        """P(particle i of frame `start` is j of frame `end`), sparse; rows sum to the probability of not having left."""
        first, last = self._frame(start), self._frame(end)
        if first >= last:
            raise checks.InputError(
                f"the frames must be in order; they are {first} and {last}; give the earlier one first"
            )
        product = csr_matrix(identity(len(self.series.clouds[first])))
        for links in self.links[first:last]:
            product = product @ links.sparse()
        return csr_matrix(product)

    def through(self, frame: int, first_row: int, last_row: int) -> np.ndarray:
        """P(at `frame` it was particle j | it is `first_row` of the first frame and `last_row` of the last one), (n,).

        Raises
        ------
        InputError
            If the two cannot be the same particle, or a row does not exist.
        """
        k, last = self._frame(frame), len(self.series) - 1
        counts = self.series.counts
        for row, where in ((first_row, 0), (last_row, last)):
            if not 0 <= row < counts[where]:
                raise checks.InputError(
                    f"no such particle; row {row} of frame {where} with {counts[where]}; use 0 to {counts[where] - 1}"
                )
        forward = self._row(first_row, 0, k)
        backward = np.zeros(counts[last])
        backward[last_row] = 1.0
        for links in reversed(self.links[k:]):
            backward = links.sparse() @ backward
        both = forward * backward
        total = both.sum()
        if not total > 0.0:
            raise checks.InputError(
                f"these two cannot be one particle; row {first_row} of the first frame reaches row {last_row} of the last with "
                "probability 0; choose a pair that `probabilities` allows"
            )
        return both / total

    def _row(self, row: int, start: int, end: int) -> np.ndarray:
        forward = np.zeros(len(self.series.clouds[start]))
        forward[row] = 1.0
        for links in self.links[start:end]:
            forward = links.sparse().T @ forward
        return forward

    def best_chance(self) -> np.ndarray:
        """Probability (n,) of the most probable particle of the last frame, for each of the first."""
        chain = self.probabilities(0, -1)
        return np.asarray(chain.max(axis=1).toarray()).ravel()

    def sample_identities(self, rows: np.ndarray, rng: Any = 0) -> np.ndarray:
        """Draw who each of some particles of the first frame (count,) is in every frame, (count, K); -1 once it has left."""
        generator = checks.generator(rng)
        current = np.asarray(rows, dtype=np.int64)
        members = np.full((current.size, len(self.series)), -1, dtype=np.int64)
        members[:, 0] = current
        for k, links in enumerate(self.links):
            alive = np.flatnonzero(members[:, k] >= 0)
            members[alive, k + 1] = _draw(links, members[alive, k], generator)
        return members

    def sample_paths(self, count: int, times: np.ndarray, rng: Any = 0, *, unwrap: bool = True) -> Paths:
        """Draw paths of one identity through all frames, seen at `times` (T,): links drawn, the prior pinned in between.

        Paths start at particles of the first frame, each about equally often. Those of particles that leave end as NaN. In
        a box paths are continuous (`unwrap`), or folded into it.
        """
        generator = checks.generator(rng)
        count = checks.whole_number(count, "count")
        seen = checks.times(np.atleast_1d(times), "times")
        frames = self.series.times
        if seen[0] < frames[0] or seen[-1] > frames[-1]:
            raise checks.InputError(
                f"times lie outside the series; they reach from {seen[0]:g} to {seen[-1]:g} and the frames from {frames[0]:g} "
                f"to {frames[-1]:g}; ask in between"
            )
        n = len(self.series.clouds[0])
        rows = generator.permutation(np.resize(np.arange(n), count))
        members = self.sample_identities(rows, generator)
        positions = np.full((count, seen.size, self.series.dimension), np.nan)
        begin = self.series.clouds[0][rows]
        positions[:, seen == frames[0]] = begin[:, None]
        for k in range(len(self.links)):
            alive = np.flatnonzero(members[:, k + 1] >= 0)
            begin = self._fill(k, alive, members, begin, (seen, positions), generator)
        box = self.prior.box
        if box is not None and not unwrap:
            positions = box.fold(positions)
        return Paths(seen, positions, members, self.series.position_names)

    def _fill(
        self,
        k: int,
        alive: np.ndarray,
        members: np.ndarray,
        begin: np.ndarray,
        out: tuple[np.ndarray, np.ndarray],
        rng: np.random.Generator,
    ) -> np.ndarray:
        """Positions over gap k of the paths that go on, and where all paths stand at its end."""
        seen, positions = out
        start, end = float(self.series.times[k]), float(self.series.times[k + 1])
        target = self.series.clouds[k + 1][members[alive, k + 1]]
        if self.prior.box is not None:
            step = self.prior.transition(end - start, self.series.dimension)
            target = draw_images(self.prior.box, step, begin[alive], target, rng)
        inside = np.flatnonzero((seen > start) & (seen < end))
        current = begin[alive]
        for at, law in zip(inside, pinned_steps(self.prior, start, end, seen[inside], self.series.dimension)):
            current = law.sample(current, target, rng)
            positions[alive, at] = current
        positions[np.ix_(alive, np.flatnonzero(seen == end))] = target[:, None]
        after = np.full_like(begin, np.nan)
        after[alive] = target
        return after

    def notes(self) -> tuple[str, ...]:
        """Sentences about where the chain of links is ambiguous."""
        notes = []
        for links in self.links:
            best = np.asarray(links.sparse().max(axis=1).toarray()).ravel()
            if best.mean() < _AMBIGUOUS:
                notes.append(
                    f"links between t = {self.series.times[links.source]:g} and t = {self.series.times[links.target]:g} are "
                    f"ambiguous: the best link of a particle has probability {best.mean():.2f} on average"
                )
        if len(self.links) > 1 and (best_chain := float(self.best_chance().mean())) < _AMBIGUOUS:
            notes.append(
                f"identities are lost over the whole series: the best guess for a particle has probability {best_chain:.2f}"
            )
        return tuple(notes)

    def __repr__(self) -> str:
        return (
            f"LinkChain({len(self.series)} frames, {len(self.series.clouds[0])} particles in the first; the best guess for a "
            f"particle in the last frame has probability {self.best_chance().mean():.3f} on average)"
        )


def _draw(links: ParticleLinks, rows: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """One later particle for each row, -1 where it left."""
    graph = links.graph
    sums = np.concatenate([[0.0], np.cumsum(links.probabilities)])
    low, high = sums[graph.starts[rows]], sums[graph.starts[rows + 1]]
    goal = low + rng.random(rows.size) * (high - low + links.probability_left[rows])
    edge = np.searchsorted(sums, goal, side="right") - 1
    edge = np.clip(edge, graph.starts[rows], graph.starts[rows + 1] - 1)
    return np.where(
        goal < high, graph.columns[edge], np.where(links.probability_left[rows] > 0, -1, graph.columns[edge])
    )


def chain_links(series: SnapshotSeries, prior: LinearGaussianPrior, links: list[ParticleLinks]) -> LinkChain:
    """Chain the links of all gaps, made by `link_particles` from the same series and prior.

    Warns
    -----
    RuntimeWarning
        Where the chain of links is ambiguous.

    Examples
    --------
    >>> import ensembles
    >>> frames = [[[0.0], [5.0]], [[5.1], [0.1]], [[0.2], [5.3]]]
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0, 2.0], frames)
    >>> prior = ensembles.Brownian(diffusion=0.05)
    >>> chain = ensembles.chain_links(series, prior, ensembles.link_particles(series, prior))
    >>> chain.probabilities().toarray().round(3).tolist()
    [[1.0, 0.0], [0.0, 1.0]]
    """
    shapes = [found.shape for found in links]
    if shapes != list(zip(series.counts[:-1].tolist(), series.counts[1:].tolist())):
        raise checks.InputError(
            f"the links do not belong to these frames; they link {shapes} particles and the frames hold "
            f"{series.counts.tolist()}; link the same series"
        )
    chain = LinkChain(series, prior, tuple(links))
    for note in chain.notes():
        warnings.warn(note, RuntimeWarning, stacklevel=2)
    return chain
