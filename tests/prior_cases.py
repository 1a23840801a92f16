"""Every prior of the package and its variants, for the laws that all of them must obey."""

import numpy as np

import ensembles
from ensembles.priors.base import LinearGaussianPrior

SPD = [[0.8, 0.3], [0.3, 0.5]]

# name -> (prior, dimension)
PRIOR_CASES: dict[str, tuple[LinearGaussianPrior, int]] = {
    "brownian": (ensembles.Brownian(diffusion=0.43), 2),
    "brownian with drift": (ensembles.Brownian(diffusion=0.43, drift=[1.0, -0.5]), 2),
    "brownian per axis": (ensembles.Brownian(diffusion=[0.2, 1.5, 0.7], drift=0.3), 3),
    "brownian matrix": (ensembles.Brownian(diffusion=SPD, drift=[0.1, 0.2]), 2),
    "ou scalar": (ensembles.OrnsteinUhlenbeck(rate=0.8, centre=0.5, diffusion=0.43), 2),
    "ou one dimension": (ensembles.OrnsteinUhlenbeck(rate=1.0, centre=0.0, diffusion=1.0), 1),
    "ou per axis": (ensembles.OrnsteinUhlenbeck(rate=[0.3, 2.0], centre=[1.0, -1.0], diffusion=[0.5, 0.1]), 2),
    "ou matrix diffusion": (ensembles.OrnsteinUhlenbeck(rate=0.4, centre=0.2, diffusion=SPD), 2),
    "ou matrix": (ensembles.OrnsteinUhlenbeck(rate=[[1.0, 0.4], [0.2, 0.7]], centre=[1.0, 2.0], diffusion=SPD), 2),
    "ou rotation": (ensembles.OrnsteinUhlenbeck(rate=[[0.5, 2.0], [-2.0, 0.5]], centre=[0.3, 0.0], diffusion=0.3), 2),
    "ou pure rotation": (ensembles.OrnsteinUhlenbeck(rate=[[0.0, 1.5], [-1.5, 0.0]], centre=0.0, diffusion=0.3), 2),
    "ou rate 0 on one axis": (ensembles.OrnsteinUhlenbeck(rate=[1.0, 0.0], centre=[0.5, 3.0], diffusion=0.3), 2),
    "ou singular matrix": (ensembles.OrnsteinUhlenbeck(rate=[[1.0, 1.0], [1.0, 1.0]], centre=0.5, diffusion=SPD), 2),
    "ou nilpotent": (ensembles.OrnsteinUhlenbeck(rate=[[0.0, -1.0], [0.0, 0.0]], centre=0.0, diffusion=0.4), 2),
    "ou unstable": (ensembles.OrnsteinUhlenbeck(rate=-0.6, centre=0.1, diffusion=0.2), 2),
    "ou saddle": (ensembles.OrnsteinUhlenbeck(rate=[[0.5, 0.9], [0.9, -0.4]], centre=0.1, diffusion=0.2), 2),
}


def start_points(count: int, dimension: int) -> np.ndarray:
    """Fixed, scattered start points (count, dimension)."""
    return np.random.default_rng(3).normal(size=(count, dimension)) * 1.5 + 0.2
