"""Error bars on lineage tables: refits to randomly re-weighted cells, each started from the bridge itself."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, ClassVar

import numpy as np

from .. import checks
from ..assessment.uncertainty import bootstrap
from .chain import descendant_weights, expected_at_end, expected_at_start
from .labels import labels_at, snapshot_pair

if TYPE_CHECKING:
    import pandas

    from ..bridges.bridge import Bridge

__all__ = ["LineageProbabilities", "lineage_errors"]

_DIRECTIONS = ("descendants", "ancestors")


@dataclass(frozen=True)
class LineageProbabilities:
    """The table of `descendants` or `ancestors` as a quantity of `bootstrap`, for each particle or averaged by label."""

    direction: str = "descendants"
    start: int = 0
    end: int = -1
    by: str = "particle"
    scales: ClassVar[tuple[str, ...]] = ("logit",)

    def __post_init__(self) -> None:
        for name, value, known in (("direction", self.direction, _DIRECTIONS), ("by", self.by, ("particle", "label"))):
            if value not in known:
                raise checks.unknown_name(f"{name} of lineage probabilities", value, known)

    def evaluate(self, bridge: Bridge) -> np.ndarray:
        """(q,) probabilities, row after row of the table."""
        start, end = snapshot_pair(bridge, self.start, self.end)
        forward = self.direction == "descendants"
        of, to = (start, end) if forward else (end, start)
        carry = expected_at_end if forward else expected_at_start
        table = carry(bridge, labels_at(bridge.series, to).indicators, start, end)
        table = table / table.sum(axis=1, keepdims=True)
        if self.by == "label":
            own = labels_at(bridge.series, of)
            weights = own.indicators * self._weights(bridge, start, end)[:, None]
            with np.errstate(invalid="ignore"):
                table = (weights / weights.sum(axis=0)).T @ table
        return table.ravel()

    def _weights(self, bridge: Bridge, start: int, end: int) -> np.ndarray:
        """Weights that average the particles of a label: as many as each has descendants, or as each counts at the end."""
        if self.direction == "descendants":
            return descendant_weights(bridge, start, end)
        return bridge.gaps[end - 1].weights[1]

    def labels(self, bridge: Bridge) -> list[dict[str, Any]]:
        """particle or label, and to: the label whose probability it is."""
        start, end = snapshot_pair(bridge, self.start, self.end)
        of, to = (start, end) if self.direction == "descendants" else (end, start)
        rows: list[Any] = list(range(len(bridge.series.clouds[of])))
        if self.by == "label":
            rows = list(labels_at(bridge.series, of).names)
        return [{self.by: row, "to": name} for row in rows for name in labels_at(bridge.series, to).names]


def lineage_errors(
    bridge: Bridge, quantity: LineageProbabilities | None = None, *, repeats: int = 50, workers: int = 1, rng: Any = 0
) -> pandas.DataFrame:
    """Standard errors of every probability of a lineage table, by the weighted bootstrap over particles.

    All particles of all snapshots are re-weighted at random and the bridge is fitted again from its own potentials, so that
    the sampling noise of every snapshot is in the errors; that the prior could be wrong is not.

    Parameters
    ----------
    bridge : a bridge between particles of a series with labels.
    quantity : which table; by default the descendants of each particle of the first snapshot at the last.
    repeats : refits, at least 2; 50 give each error to a tenth.
    workers : threads; the result does not depend on it.
    rng : int or numpy Generator.

    Returns
    -------
    DataFrame
        particle (or label), to, estimate, standard_error, bias, lower, upper (a 90 % interval).

    Examples
    --------
    >>> import numpy as np, ensembles
    >>> x = np.linspace(-2.0, 2.0, 30)
    >>> series = ensembles.SnapshotSeries.from_arrays(
    ...     [0, 1], [x, x], labels=[["early"] * 30, ["low"] * 15 + ["high"] * 15]
    ... )
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5))
    >>> table = ensembles.lineage_errors(bridge, ensembles.LineageProbabilities(by="label"), repeats=20)
    >>> table["estimate"].round(6).tolist(), bool(0.03 < table["standard_error"][0] < 0.2)
    ([0.5, 0.5], True)
    """
    chosen = LineageProbabilities() if quantity is None else quantity
    bands = bootstrap(bridge, chosen, repeats=repeats, workers=workers, rng=rng)
    frame = bands.to_frame()
    frame.attrs["warnings"] = list(bands.warnings)
    return frame
