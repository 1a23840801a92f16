"""Invented data: tracer beads released at one side of a shallow channel with a weak trap.

Each bead moves by dX = -K (X - θ) dt + sqrt(2 D) dW. At every time another draw of beads is looked at, so nothing says
which bead is which. D is that of a sphere of 1 µm in water at 20 °C: k_B T / (3 π η d) = 4.05e-21 J / (3 π 1.00e-3 Pa s
1e-6 m) = 0.43 µm²/s.
"""

from __future__ import annotations

import numpy as np

__all__ = ["COUNTS", "DIFFUSION", "RATES", "TIMES", "beads"]

TIMES = (0.0, 6.0, 12.0)
"""Times of the three films, in s."""
COUNTS = (420, 385, 405)
"""Beads found in each."""
DIFFUSION = 0.43
"""In µm²/s."""
RATES = (0.08, 0.25)
"""Pull of the trap along and across the channel, in 1/s."""
RELEASE = (-6.0, 1.0)
"""Centre of the release spot in µm; the trap is centred at 0."""
RELEASE_WIDTH = (0.8, 0.5)
"""Standard deviations of the release spot in µm."""


def beads(rng: np.random.Generator) -> dict[str, np.ndarray]:
    """Draw the beads of all films.

    Exact: over a time t from release the mean decays by e^{-κt} and the variance is s² e^{-2κt} + D (1 - e^{-2κt}) / κ.

    Parameters
    ----------
    rng : numpy Generator.

    Returns
    -------
    dict of columns t_s (s), x_um and y_um (µm), one row a bead.

    Examples
    --------
    >>> columns = beads(np.random.default_rng(0))
    >>> sorted(columns), len(columns["t_s"])
    (['t_s', 'x_um', 'y_um'], 1210)
    """
    rates, release, width = np.array(RATES), np.array(RELEASE), np.array(RELEASE_WIDTH)
    clouds = []
    for time, count in zip(TIMES, COUNTS):
        decay = np.exp(-rates * time)
        variance = width**2 * decay**2 + DIFFUSION * (1.0 - decay**2) / rates
        clouds.append(release * decay + np.sqrt(variance) * rng.standard_normal((count, 2)))
    positions = np.concatenate(clouds)
    return {"t_s": np.repeat(TIMES, COUNTS), "x_um": positions[:, 0], "y_um": positions[:, 1]}
