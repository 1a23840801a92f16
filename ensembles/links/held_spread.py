"""Links whose mean squared displacement is what the prior says: for particles that are crowded and keep apart.

Where all particles of a liquid are seen, others move into the place that one has left. Seen as independent particles they seem
to have moved less than they did, and links by the prior's own variance are too sure of the nearest. If the diffusion is known
from elsewhere, the least that one can say of the links is that their mean squared displacement is right: among all laws of
links with that mean, the one of largest entropy (relative to all assignments being alike) weighs an assignment by

    Π_links exp(-|r|² / 2 s),    |r|² in units of the prior's noise,

the law of independent particles with s times the variance. s is where the score of the prior's own variance, averaged over
the links, is zero: Σ_ij β_ij(s) ∂ log p(y_j | x_i) / ∂ log variance = 0, that is, mean |r|² = d, images of a box included.
At the prior of the largest evidence this score is zero by definition, and s = 1.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.optimize import brentq

from .. import checks
from ..schrodinger.assignment import AssignmentGraph
from .candidates import LinkOptions, linked_posterior, messages_of_all_pairs
from .cluster_sums import link_sums
from .law import LinkLaw

__all__ = ["held_variance", "relative_spread"]

_DERIVATIVE = 1e-3
_FARTHEST = 2.0  # times the prior's variance, or its inverse; beyond it frames and prior disagree
_STEP = 1.15
_ACCURACY = 1e-3  # of log s


def held_variance(
    law_at: Callable[[float], LinkLaw], log_alone: tuple[np.ndarray, np.ndarray], options: LinkOptions, gap: str
) -> float:
    """The factor s of the prior's variance at which links move, in the mean of their squares, as the prior says.

    `law_at(s)` is the law of links with s times the prior's variance; `gap` names the gap in messages.

    Raises
    ------
    ComputationError
        Where no factor between 1/2 and 2 will do: the diffusion is wrong, or links are so clear that no factor moves them.
    """
    known: dict[float, float] = {}
    start: list[np.ndarray | None] = [None]

    def excess(log_factor: float) -> float:
        if log_factor not in known:
            posterior, _ = linked_posterior(law_at(float(np.exp(log_factor))), log_alone, options, start[0])
            start[0] = messages_of_all_pairs(posterior)
            probabilities = link_sums(posterior, options).probabilities
            known[log_factor] = relative_spread(posterior.graph, probabilities, law_at) - 1.0
        return known[log_factor]

    way = 1.0 if excess(0.0) < 0.0 else -1.0
    near, far = 0.0, way * float(np.log(_STEP))
    while way * excess(far) < 0.0:
        if abs(far) >= np.log(_FARTHEST):
            raise checks.ComputationError(
                f"the links {gap} cannot be held to the prior's spread; with {np.exp(far):.3g} times its variance they still "
                f"move {'less' if way > 0 else 'more'} than it says; give another diffusion, or leave hold_spread out"
            )
        near, far = far, way * float(min(2.0 * abs(far), np.log(_FARTHEST)))
    return float(np.exp(brentq(excess, near, far, xtol=_ACCURACY, rtol=1e-12)))


def relative_spread(graph: AssignmentGraph, probabilities: np.ndarray, law_at: Callable[[float], LinkLaw]) -> float:
    """Mean squared displacement over the links (E,) relative to what the prior says: 1 + 2 (mean score) / d.

    The score is ∂ log p / ∂ log variance under the prior's own variance, (|r|² - d) / 2 without walls; its mean is 0 if the
    prior is right, in a box and with a localisation error too.
    """
    above, below = law_at(float(np.exp(_DERIVATIVE))), law_at(float(np.exp(-_DERIVATIVE)))
    slopes = above.log_weights(graph.rows, graph.columns) - below.log_weights(graph.rows, graph.columns)
    mean = probabilities @ slopes / (2.0 * _DERIVATIVE * max(float(probabilities.sum()), 1e-300))
    return 1.0 + 2.0 * float(mean) / above.sources.shape[1]
