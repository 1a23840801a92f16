"""The likelihood of a smooth terminal potential given two unpaired clouds, with exact gradients by responsibilities.

In whitened coordinates (u: start carried by the prior's mean, v: end, unit noise) every mixture potential is

    φ(v) = Σ_k α_k N(v | r_k, C_k) exp(½|v|²),   C_k positive,

with φ carried back over the gap = (2π)^(-d/2) Σ_k α_k exp(u·r_k + ½ uᵀ C_k u - ½|u|²), and given u the end is
Σ_k ∝ α_k exp(u·r_k + ½ uᵀ C_k u) N(C_k u + r_k, C_k). C_k below the identity are Gaussian bumps N(v | μ_k, S_k),
C_k = (S_k⁻¹ + I)⁻¹; beyond it they grow outwards, as ends wider than the prior reaches need. Up to a constant the mean
log-likelihood of the bridge from its true coupling is

    J = Σ_j b_j log Σ_k α_k N(v_j | r_k, C_k) - Σ_i a_i log Σ_k α_k exp(u_i·r_k + ½ u_iᵀ C_k u_i),

which needs the two clouds alone. A stated prior keeps components from collapsing on one point: -(ν / 2n) Σ_k tr(τ C_k⁻¹),
which holds a component that rests on one of n points at C = ν τ and moves others by a share of about τ / (n C).
Source of the parametrisation: Korotin, Gushchin, Burnaev 2024 (from memory; derived again in tests/test_smooth_ends.py).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import solve_triangular

from ..kernels.threads import run_blocks
from ..logspace import log_sum_exp
from .covariance import Parametrisation

__all__ = ["Likelihood", "Tilted", "WhitenedClouds", "coefficients", "log_sums", "statistics"]

_TILE = 4096


@dataclass(frozen=True)
class WhitenedClouds:
    """u (n, d) with weights a (n,), v (m, d) with weights b (m,); dimensionless; weights sum to 1."""

    u: np.ndarray
    a: np.ndarray
    v: np.ndarray
    b: np.ndarray

    def subset(self, rows: np.ndarray, columns: np.ndarray) -> WhitenedClouds:
        """Some points of either cloud, with weights that sum to 1 again."""
        a, b = self.a[rows], self.b[columns]
        return WhitenedClouds(self.u[rows], a / a.sum(), self.v[columns], b / b.sum())


@dataclass(frozen=True)
class Tilted:
    """log α (K,), r (K, d) and C (K, d) or (K, d, d) of a potential in whitened coordinates."""

    log_alpha: np.ndarray
    r: np.ndarray
    c: np.ndarray

    @property
    def count(self) -> int:
        """Number of components."""
        return self.log_alpha.size


@dataclass(frozen=True)
class Likelihood:
    """J and its gradient for one kind of covariance; `floor` (d,) is τ of the stated prior, `strength` ν / n."""

    clouds: WhitenedClouds
    kind: Parametrisation
    floor: np.ndarray
    strength: float

    @property
    def size(self) -> int:
        """Numbers in the parameter vector: log α, r, covariances."""
        return self.kind.count * (1 + self.kind.dimension) + self.kind.size

    def pack(self, tilted: Tilted) -> np.ndarray:
        """The parameter vector of a potential."""
        log_alpha = tilted.log_alpha - tilted.log_alpha.max()
        return np.concatenate([log_alpha, tilted.r.ravel(), self.kind.pack(tilted.c)])

    def unpack(self, theta: np.ndarray) -> Tilted:
        """The potential of a parameter vector."""
        k, d = self.kind.count, self.kind.dimension
        return Tilted(theta[:k], theta[k : k * (1 + d)].reshape(k, d), self.kind.unpack(theta[k * (1 + d) :]))

    def terms(self, theta: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log φ at every end and log φ carried back at every start, up to a common constant; (m,) and (n,)."""
        tilted, clouds = self.unpack(theta), self.clouds
        end, start = coefficients(tilted)
        return log_sums(clouds.v, end), log_sums(clouds.u, start)

    def value(self, theta: np.ndarray) -> float:
        """J without the stated prior."""
        ends, starts = self.terms(theta)
        return float(self.clouds.b @ ends - self.clouds.a @ starts)

    def masses(self, theta: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Mean responsibilities (K,) of the end cloud and of the start cloud; equal where the weights are fitted."""
        end, start = coefficients(self.unpack(theta))
        return (
            statistics(self.clouds.v, self.clouds.b, end)[1][0],
            statistics(self.clouds.u, self.clouds.a, start)[1][0],
        )

    def value_and_gradient(self, theta: np.ndarray) -> tuple[float, np.ndarray]:
        """J with the stated prior, and its gradient."""
        tilted, clouds = self.unpack(theta), self.clouds
        end, start = coefficients(tilted)
        ends, (mass_v, first_v, second_v) = statistics(clouds.v, clouds.b, end)
        starts, (mass_u, first_u, second_u) = statistics(clouds.u, clouds.a, start)
        r = tilted.r
        if self.kind.diagonal:
            inverse = 1.0 / tilted.c
            by_r = inverse * (first_v - mass_v[:, None] * r) - first_u
            spread = second_v - 2.0 * r * first_v + mass_v[:, None] * r * r
            by_c = 0.5 * inverse * (inverse * spread - mass_v[:, None]) - 0.5 * second_u
            penalty = (self.floor * inverse).sum()
            by_c += 0.5 * self.strength * self.floor * inverse**2
        else:
            inverse = np.linalg.inv(tilted.c)
            by_r = np.einsum("kij,kj->ki", inverse, first_v - mass_v[:, None] * r) - first_u
            cross = first_v[:, :, None] * r[:, None]
            spread = second_v - cross - cross.swapaxes(1, 2) + mass_v[:, None, None] * r[:, :, None] * r[:, None]
            by_c = 0.5 * (inverse @ spread @ inverse - mass_v[:, None, None] * inverse) - 0.5 * second_u
            penalty = (np.diagonal(inverse, axis1=1, axis2=2) * self.floor).sum()
            by_c += 0.5 * self.strength * (inverse * self.floor @ inverse)
            by_c = 0.5 * (by_c + by_c.swapaxes(1, 2))
        value = float(clouds.b @ ends - clouds.a @ starts) - 0.5 * self.strength * penalty
        packed = theta[self.kind.count * (1 + self.kind.dimension) :]
        gradient = np.concatenate([mass_v - mass_u, by_r.ravel(), self.kind.pulled_back(packed, by_c)])
        return value, gradient

    def scale(self, theta: np.ndarray) -> np.ndarray:
        """Rough standard deviations of the parameters, for a well-conditioned ascent: by the Fisher information."""
        tilted = self.unpack(theta)
        ends = coefficients(tilted)[0]
        _, (mass, _, _) = statistics(self.clouds.v[:5000], self.clouds.b[:5000] / self.clouds.b[:5000].sum(), ends)
        share = 1.0 / np.sqrt(np.maximum(mass, 1e-3))
        variances = tilted.c if self.kind.diagonal else np.diagonal(tilted.c, axis1=1, axis2=2)
        r = (np.sqrt(variances) * share[:, None]).ravel()
        repeats = self.kind.size // self.kind.count
        if self.kind.kind == "low-rank":
            d = self.kind.dimension
            factors = np.repeat(np.sqrt(variances) * share[:, None], self.kind.rank, axis=1).reshape(-1)
            return np.concatenate([share, r, np.repeat(share, d), factors])
        return np.concatenate([share, r, np.repeat(share, repeats)])


Coefficients = tuple[np.ndarray, np.ndarray, np.ndarray]


def coefficients(tilted: Tilted) -> tuple[Coefficients, Coefficients]:
    """(constant, linear, quadratic) of both sums: exponent k is constant_k + linear_k·z + zᵀ quadratic_k z."""
    r, c = tilted.r, tilted.c
    d = r.shape[1]
    if c.ndim == 2:
        inverse = 1.0 / c
        linear = r * inverse
        log_det = np.log(c).sum(axis=1)
    else:
        roots = np.linalg.cholesky(c)
        inverse_roots = np.stack([solve_triangular(root, np.eye(d), lower=True) for root in roots])
        inverse = inverse_roots.swapaxes(1, 2) @ inverse_roots
        linear = np.einsum("kij,kj->ki", inverse, r)
        log_det = 2.0 * np.log(np.diagonal(roots, axis1=1, axis2=2)).sum(axis=1)
    constant = tilted.log_alpha - 0.5 * ((linear * r).sum(axis=1) + log_det + d * np.log(2.0 * np.pi))
    return (constant, linear, -0.5 * inverse), (tilted.log_alpha, r, 0.5 * c)


def _logits(z: np.ndarray, squares: np.ndarray | None, coefficients: Coefficients) -> np.ndarray:
    constant, linear, quadratic = coefficients
    logits = z @ linear.T
    logits += constant
    if quadratic.ndim == 2:
        logits += (z * z if squares is None else squares) @ quadratic.T
    else:
        for k, matrix in enumerate(quadratic):
            logits[:, k] += np.einsum("ij,ij->i", z @ matrix, z)
    return logits


def log_sums(z: np.ndarray, coefficients: Coefficients) -> np.ndarray:
    """log Σ_k exp(exponent k) at every row of z, (n,); in tiles."""
    out = np.empty(len(z))
    for first in range(0, len(z), _TILE):
        part = z[first : first + _TILE]
        out[first : first + _TILE] = log_sum_exp(_logits(part, None, coefficients), axis=1)
    return out


def statistics(
    z: np.ndarray, weights: np.ndarray, coefficients: Coefficients
) -> tuple[np.ndarray, tuple[np.ndarray, np.ndarray, np.ndarray]]:
    """Log sums (n,), and the weighted responsibilities' mass (K,), first and second moments; tiles on all threads."""
    diagonal = coefficients[2].ndim == 2
    bounds = [(first, min(first + _TILE, len(z))) for first in range(0, len(z), _TILE)]
    sums = np.empty(len(z))
    parts: list[tuple[np.ndarray, np.ndarray, np.ndarray] | None] = [None] * len(bounds)

    def task(block: int, first: int, last: int) -> None:
        part = z[first:last]
        squares = part * part if diagonal else None
        logits = _logits(part, squares, coefficients)
        top = logits.max(axis=1, keepdims=True)
        logits -= top
        np.exp(logits, out=logits)
        total = logits.sum(axis=1)
        sums[first:last] = np.log(total) + top[:, 0]
        logits *= (weights[first:last] / total)[:, None]
        if squares is not None:
            second = logits.T @ squares
        else:
            second = np.stack([(part.T * logits[:, k]) @ part for k in range(logits.shape[1])])
        parts[block] = (logits.sum(axis=0), logits.T @ part, second)

    run_blocks(task, bounds, 4.0 * len(z) * len(coefficients[0]))
    done = [part for part in parts if part is not None]
    mass, first_moment, second_moment = (np.sum([part[i] for part in done], axis=0) for i in range(3))
    return sums, (mass, first_moment, second_moment)
