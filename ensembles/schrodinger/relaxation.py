"""The factor of over-relaxed sweeps, learned while they run.

Plain sweeps contract the error by θ each, asymptotically. With g ← (1 - ω) g + ω g_plain (likewise f) the best factor
is ω = 2 / (1 + sqrt(1 - θ)), which contracts by ω - 1; away from it the observed rate λ gives θ back by Young's
relation (λ + ω - 1)² = λ ω² θ (successive over-relaxation; Young 1954; for matrix scaling Thibault et al. 2021; from
memory).
"""

from __future__ import annotations

import numpy as np

__all__ = ["RelaxationControl", "best_factor"]

_PLAIN = 6
_FEW = 3
_BLOCK = 12
_LARGEST = 1.97
_SLOW = 0.97


def best_factor(contraction: float) -> float:
    """2 / (1 + sqrt(1 - θ)) for plain sweeps that contract by θ < 1.

    Examples
    --------
    >>> round(best_factor(0.75), 6)
    1.333333
    """
    return float(2.0 / (1.0 + np.sqrt(1.0 - contraction)))


class RelaxationControl:
    """Watches the errors of successive sweeps and proposes the next factor; falls back to 1 when they grow."""

    def __init__(self, first_factor: float = 1.0) -> None:
        # A known factor waits for a few plain sweeps, which take off what contracts quickly.
        self.factor = 1.0
        self._known = min(first_factor, _LARGEST)
        self.rate = 1.0  # contraction a sweep at the present factor
        self.settled = False  # whether the rate is known
        if self._known > 1.0:
            self.rate, self.settled = max(self._known - 1.0, 0.1), True
        elif self._known == 0.0:  # a like problem needed second-order steps: sweeps are slow
            self.rate, self.settled = _SLOW, True
        self._errors: list[float] = []
        self._ceiling = _LARGEST
        self._wait = _FEW if first_factor > 1.0 else _PLAIN

    def observe(self, error: float) -> None:
        """Take the error after a sweep made with `factor`, and renew `rate` and `factor` at the end of a block."""
        self._errors.append(max(error, 1e-300))
        if self._errors[-1] > 10.0 * min(self._errors) or not np.isfinite(error):
            self._ceiling = 1.0 + 0.7 * (self.factor - 1.0)
            self._restart(1.0, _PLAIN)
            return
        if len(self._errors) < self._wait:
            return
        if self._known > 1.0:
            known, self._known = self._known, 1.0
            self._restart(known, 2 * _BLOCK)
            return
        self.settled = True
        half = len(self._errors) // 2
        self.rate = float((self._errors[-1] / self._errors[half]) ** (1.0 / (len(self._errors) - 1 - half)))
        if self.factor == 1.0:
            theta = min(self.rate, 0.99999)
        elif self.rate > self.factor - 1.0 + 1e-3:
            excess = self.factor - 1.0
            theta = min((self.rate + excess) ** 2 / (self.rate * self.factor**2), 0.99999)
        else:
            self._restart(self.factor, _BLOCK)
            return
        self._restart(min(best_factor(theta), self._ceiling), _BLOCK)

    def sweeps_to(self, error: float, tolerance: float) -> float:
        """Predicted sweeps from `error` down to `tolerance` at the observed rate."""
        if error <= tolerance:
            return 0.0
        return float(np.log(error / tolerance) / -np.log(min(self.rate, 1.0 - 1e-12)))

    def _restart(self, factor: float, wait: int) -> None:
        self.factor = factor
        self._wait = wait
        self._errors = []
