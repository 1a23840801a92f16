"""What unlabelled frames say about a prior's parameters: values, errors, intervals, profiles."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy.interpolate import CubicSpline
from scipy.stats import chi2, norm

from .. import checks
from ..priors.base import LinearGaussianPrior

if TYPE_CHECKING:
    import pandas

    from .estimate import Evidence

__all__ = ["PriorEstimate"]


@dataclass(frozen=True, eq=False, repr=False)
class PriorEstimate:
    """The prior of the largest evidence, summed over links; made by `estimate_prior`.

    Attributes
    ----------
    log_evidence : over all gaps at the estimate, in nats: the Bethe permanent, corrected by exact sums over clusters.
    curvature : (p, p) negative second derivatives there, on the scales of the search.
    found : whether the search ended at a maximum.
    crowded : whether the particles keep apart and are crowded in every frame, so that they cannot move independently; the
        estimate can then be far off, whatever its standard error.
    """

    evidence: Evidence
    free: np.ndarray
    log_evidence: float
    curvature: np.ndarray
    found: bool
    crowded: bool = False

    @cached_property
    def prior(self) -> LinearGaussianPrior:
        """The estimated prior."""
        return self.evidence.family.build(self.free)[0]

    @property
    def localisation(self) -> float:
        """The localisation error of a coordinate, estimated or as it was given, in length."""
        return self.evidence.family.build(self.free)[1]

    @property
    def values(self) -> dict[str, float]:
        """Free parameters by name, in the units of the series."""
        family = self.evidence.family
        return dict(zip(family.names, map(float, family.natural(self.free))))

    @cached_property
    def covariance(self) -> np.ndarray:
        """Covariance (p, p) of the parameters on the scales of the search: the inverse curvature; NaN if not positive."""
        try:
            np.linalg.cholesky(self.curvature)
        except np.linalg.LinAlgError:
            return np.full_like(self.curvature, np.nan)
        return np.linalg.inv(self.curvature)

    @property
    def has_maximum(self) -> bool:
        """Whether the evidence has a maximum with positive curvature in every direction."""
        return self.found and bool(np.isfinite(self.covariance).all())

    @property
    def identified(self) -> bool:
        """Whether the frames tell the parameters: it has a maximum, and the particles are not crowded."""
        return self.has_maximum and not self.crowded

    @cached_property
    def standard_errors(self) -> dict[str, float]:
        """Standard errors by name from the curvature of the log evidence, in the units of the series."""
        family, size = self.evidence.family, self.free.size
        jacobian = np.empty((size, size))
        for i in range(size):
            step = np.zeros(size)
            step[i] = 1e-5
            jacobian[:, i] = (family.natural(self.free + step) - family.natural(self.free - step)) / 2e-5
        variances = np.einsum("ij,jk,ik->i", jacobian, self.covariance, jacobian)
        return dict(zip(family.names, map(float, np.sqrt(variances))))

    def _number(self, name: str) -> int:
        names = self.evidence.family.names
        if name not in names:
            raise checks.unknown_name("parameter", name, names)
        return names.index(name)

    def interval(self, name: str, level: float = 0.95) -> tuple[float, float]:
        """Confidence interval of one parameter, symmetric in its logarithm where it is positive by nature."""
        i = self._number(name)
        width = float(norm.ppf(0.5 + 0.5 * level))
        if self.evidence.family.logarithmic[i]:
            spread = width * float(np.sqrt(self.covariance[i, i]))
            return float(np.exp(self.free[i] - spread)), float(np.exp(self.free[i] + spread))
        value, error = self.values[name], self.standard_errors[name]
        return value - width * error, value + width * error

    def profile(self, name: str, points: int = 15) -> pandas.DataFrame:
        """The log evidence along one parameter, the others at their best for it: value, log_evidence, below_maximum.

        Values reach 3.5 standard errors to either side, the estimate among them. The curve is the integral of the same score
        whose zero is the estimate. `below_maximum` is compared with ½ χ²: 1.92 at 95 %.
        """
        import pandas

        i = self._number(name)
        if self.evidence.family.diffusion == "matrix" and name.startswith("diffusion"):
            raise checks.InputError(
                f"an entry of a diffusion matrix has no profile of its own; {name!r}; ask for diffusion per axis"
            )
        points = checks.whole_number(points, "points", 3)
        error = float(np.sqrt(self.covariance[i, i])) if self.has_maximum else 0.5
        # The estimate itself is among the points, and the curve starts from it.
        offsets = np.union1d(np.linspace(-3.5, 3.5, points) * error, [0.0])
        places, slopes = [], []
        # The other parameters follow the uncorrected evidence from where the corrected one has them.
        shift = self.free - self.evidence.maximise(self.free, held=i)[0]
        for offset in offsets:
            start = self.free.copy()
            start[i] += offset
            best = self.evidence.maximise(start, held=i)[0] + shift
            places.append(float(self.evidence.family.natural(best)[i]))
            slopes.append(self.evidence.at(best, clusters=True)[1][i])
        curve = CubicSpline(offsets, slopes).antiderivative()
        change = curve(offsets) - curve(0.0)
        rows = zip(places, self.log_evidence + change, -change)
        return pandas.DataFrame(rows, columns=["value", "log_evidence", "below_maximum"])

    def to_frame(self, level: float = 0.95) -> pandas.DataFrame:
        """One row a parameter: parameter, value, standard_error, lower, upper, unit."""
        import pandas

        units = self._units()
        rows: list[dict[str, Any]] = []
        for name, value in self.values.items():
            lower, upper = self.interval(name, level)
            rows.append({
                "parameter": name, "value": value, "standard_error": self.standard_errors[name],
                "lower": lower, "upper": upper, "unit": units[name.split("[")[0]],
            })  # fmt: skip
        return pandas.DataFrame(rows)

    def _units(self) -> dict[str, str]:
        length, time = self.evidence.series.length_unit, self.evidence.series.time_unit
        known = bool(length and time)
        return {
            "diffusion": f"{length}²/{time}" if known else "",
            "drift": f"{length}/{time}" if known else "",
            "rate": f"1/{time}" if time else "",
            "centre": length,
            "localisation": length,
        }

    @staticmethod
    def drop_at(level: float = 0.95) -> float:
        """How far below its maximum the log evidence lies at the ends of an interval: ½ χ² with one degree of freedom."""
        return 0.5 * float(chi2.ppf(level, 1))

    def __repr__(self) -> str:
        units = self._units()
        shown = [
            f"{name} = {value:.4g} ± {self.standard_errors[name]:.2g} {units[name.split('[')[0]]}".rstrip()
            for name, value in self.values.items()
        ]
        warning = "" if self.identified else "; NOT identified by these frames"
        return f"PriorEstimate({self.prior!r}: {', '.join(shown)}; log evidence {self.log_evidence:.2f}{warning})"
