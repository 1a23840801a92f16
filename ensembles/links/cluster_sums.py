"""Link probabilities of a posterior: all exact for few particles, else corrected by clusters as the options say."""

from __future__ import annotations

import numpy as np

from ..schrodinger.assignment import AssignmentPosterior
from ..schrodinger.clusters import ClusterSums, sum_clusters
from ..schrodinger.exact_assignment import EXACT_LIMIT
from .candidates import LinkOptions

__all__ = ["is_enumerated", "link_sums"]


def is_enumerated(posterior: AssignmentPosterior) -> bool:
    """Whether the particles are so few that all assignments are summed."""
    return max(posterior.graph.shape) <= EXACT_LIMIT


def link_sums(posterior: AssignmentPosterior, options: LinkOptions) -> ClusterSums:
    """Probabilities of links, and of particles that are alone."""
    if is_enumerated(posterior) or options.cluster:
        return sum_clusters(posterior, limit=EXACT_LIMIT if is_enumerated(posterior) else options.cluster)
    # Rows of the beliefs sum to 1 to the tolerance of propagation.
    ones = np.ones(posterior.graph.shape[0], int)
    return ClusterSums(posterior.probabilities, posterior.alone_rows, posterior.alone_columns, 0.0, float("nan"), ones)
