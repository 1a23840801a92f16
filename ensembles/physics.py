"""Priors from what a physicist knows: temperature, viscosity, radius, trap stiffness; and forces from drifts.

All quantities are in SI units (K, Pa s, m, N/m, m²/s); `ensembles.quantities` reads values with other units.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from . import checks

__all__ = [
    "force_from_drift",
    "stokes_einstein",
    "temperature",
    "trap_rate",
    "trap_stiffness",
    "water_viscosity",
]

_ZERO_CELSIUS = 273.15
_LOWEST, _HIGHEST = 200.0, 450.0  # K, for liquids that anyone films particles in

# Viscosity of liquid water at 0.1 MPa, μ = 1e-6 Pa s Σ a (T/300 K)^b, 253.15 K to 383.15 K: Pátek, Hrubý, Klomfar,
# Součková and Harvey, J. Phys. Chem. Ref. Data 38, 21 (2009); IAPWS SR6-08. Coefficients from memory; the tests hold
# them against the IAPWS 2008 values at 20 and 25 °C.
_WATER = ((280.68, -1.9), (511.45, -7.7), (61.131, -19.6), (0.45903, -40.0))


def _boltzmann() -> float:
    from scipy.constants import Boltzmann  # exactly 1.380649e-23 J/K

    return float(Boltzmann)


def temperature(value: Any, name: str = "temperature") -> float:
    """Check an absolute temperature in kelvin.

    Raises
    ------
    InputError
        Outside 200 to 450 K: most often a value in °C.

    Examples
    --------
    >>> temperature(298.15)
    298.15
    """
    kelvin = checks.positive_number(value, name, "give it in kelvin")
    if not _LOWEST <= kelvin <= _HIGHEST:
        guess = kelvin + _ZERO_CELSIUS
        meant = f"; if {kelvin:g} °C is meant, give {guess:g} K" if _LOWEST <= guess <= _HIGHEST else ""
        raise checks.InputError(
            f"{name} must be in kelvin, from {_LOWEST:g} to {_HIGHEST:g}; it is {kelvin:g} K{meant}; correct it"
        )
    return kelvin


def water_viscosity(kelvin: float) -> float:
    """Viscosity of liquid water at atmospheric pressure in Pa s, from 0 to 100 °C.

    Raises
    ------
    InputError
        Outside 273.15 to 373.15 K.

    Source: Pátek et al., J. Phys. Chem. Ref. Data 38, 21 (2009); stated uncertainty 1 %.

    Examples
    --------
    >>> round(1e3 * water_viscosity(293.15), 4)
    1.0016
    """
    kelvin = temperature(kelvin)
    if not _ZERO_CELSIUS <= kelvin <= _ZERO_CELSIUS + 100.0:
        raise checks.InputError(
            f"water is liquid from 273.15 to 373.15 K at atmospheric pressure; the temperature is {kelvin:g} K; "
            "give the viscosity yourself"
        )
    return 1e-6 * sum(a * (kelvin / 300.0) ** b for a, b in _WATER)


def stokes_einstein(radius: float, kelvin: float, viscosity: float | None = None) -> float:
    """Diffusion coefficient of a sphere, D = k_B T / (6 π η r), in m²/s.

    Parameters
    ----------
    radius : m. Hydrodynamic radius, half the diameter.
    kelvin : absolute temperature.
    viscosity : Pa s; that of water by default.

    Raises
    ------
    InputError
        A value that is not positive, or a temperature that is not in kelvin.

    Source: Stokes 1851; Einstein 1905; k_B from CODATA (`scipy.constants`).

    Examples
    --------
    >>> round(1e12 * stokes_einstein(0.5e-6, 293.15, viscosity=1.0016e-3), 4)  # µm²/s, a sphere of 1 µm
    0.4288
    """
    radius = checks.positive_number(radius, "radius", "give it in metres")
    kelvin = temperature(kelvin)
    eta = (
        water_viscosity(kelvin)
        if viscosity is None
        else checks.positive_number(viscosity, "viscosity", "give it in Pa s")
    )
    return _boltzmann() * kelvin / (6.0 * np.pi * eta * radius)


def trap_rate(stiffness: float, diffusion: float, kelvin: float) -> float:
    """Relaxation rate of an overdamped particle in a harmonic trap, κ = k D / (k_B T), in 1/s.

    stiffness in N/m, diffusion in m²/s. Source: Einstein's relation, friction = k_B T / D.

    Examples
    --------
    >>> round(trap_rate(1e-6, 0.43e-12, 298.15), 4)
    104.4601
    """
    stiffness = checks.positive_number(stiffness, "stiffness", "give it in N/m")
    diffusion = checks.positive_number(diffusion, "diffusion", "give it in m²/s")
    return stiffness * diffusion / (_boltzmann() * temperature(kelvin))


def trap_stiffness(rate: float, diffusion: float, kelvin: float) -> float:
    """Stiffness of the trap that relaxes at a rate, k = κ k_B T / D, in N/m; rate in 1/s, diffusion in m²/s."""
    rate = checks.positive_number(rate, "rate", "give it in 1/s")
    diffusion = checks.positive_number(diffusion, "diffusion", "give it in m²/s")
    return rate * _boltzmann() * temperature(kelvin) / diffusion


def force_from_drift(added_drift: Any, diffusion: Any, kelvin: float) -> np.ndarray:
    """Force that moves overdamped particles at a drift beyond the prior's, F = k_B T D⁻¹ u, in N.

    Parameters
    ----------
    added_drift : (n, d), m/s: a bridge's `current_velocity` minus the prior's drift, say.
    diffusion : scalar, (d,) or (d, d), m²/s.
    kelvin : absolute temperature.

    Examples
    --------
    >>> force_from_drift([[1e-6, 0.0]], 0.43e-12, 298.15).round(17).tolist()
    [[9.57e-15, 0.0]]
    """
    drift = checks.points(added_drift, "added_drift")
    matrix = checks.as_float_array(diffusion, "diffusion")
    if matrix.ndim < 2:
        matrix = np.diag(np.broadcast_to(matrix, (drift.shape[1],)))
    matrix = checks.spd_matrix(matrix * 1e12, "diffusion") * 1e-12
    if matrix.shape[0] != drift.shape[1]:
        raise checks.InputError(
            f"diffusion has the wrong dimension; it is given for {matrix.shape[0]} coordinate(s), the drift has "
            f"{drift.shape[1]}; give one number, or {drift.shape[1]}"
        )
    return _boltzmann() * temperature(kelvin) * np.linalg.solve(matrix, drift.T).T
