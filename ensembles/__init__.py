"""Schrödinger bridges between snapshots of a population whose individuals were lost.

Names are loaded on first use, so that ``import ensembles`` stays light.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

_HOMES = {
    "SnapshotSeries": "snapshots.series",
    "Growth": "snapshots.growth",
    "Scaling": "snapshots.scaling",
    "fit_scaling": "snapshots.scaling",
    "read_snapshots": "snapshots.files",
    "write_snapshots": "snapshots.files",
    "Brownian": "priors.brownian",
    "OrnsteinUhlenbeck": "priors.ornstein_uhlenbeck",
    "fit_bridge": "bridges.fit",
    "SolverOptions": "bridges.fit",
    "load_bridge": "bridges.storage",
    "gaussian_bridge": "bridges.closed_form",
    "MixtureEnds": "bridges.smooth",
    "KernelEnds": "bridges.smooth",
    "BridgeModel": "estimator",
    "Box": "priors.box",
    "Kinetic": "priors.kinetic",
    "fit_kinetic_bridge": "bridges.kinetic",
    "link_particles": "links.link",
    "LinkOptions": "links.candidates",
    "neighbour_correlation": "links.correlation",
    "chain_links": "links.chain",
    "estimate_prior": "links.estimate",
    "EstimateOptions": "links.estimate",
    "hold_out": "assessment.hold_out",
    "choose_noise": "assessment.noise",
    "bootstrap": "assessment.uncertainty",
    "influence": "assessment.uncertainty",
    "Moments": "assessment.quantities",
    "DensityAt": "assessment.quantities",
    "DriftAt": "assessment.quantities",
    "LinkProbabilities": "assessment.quantities",
    "PathQuantiles": "assessment.quantities",
    "prior_check": "assessment.surprise",
    "relative_entropy": "assessment.relative_entropy",
    "effective_sizes": "assessment.effective_sizes",
    "descendants": "lineage.fates",
    "ancestors": "lineage.fates",
    "commitment": "lineage.fates",
    "label_flows": "lineage.fates",
    "feature_trends": "lineage.features",
    "early_features": "lineage.features",
    "LineageProbabilities": "lineage.uncertainty",
    "lineage_errors": "lineage.uncertainty",
    "annotate_cells": "lineage.annotate",
    "save_cells": "lineage.annotate",
    "implied_growth": "lineage.growth",
    "kept_weights": "lineage.growth",
    "label_summary": "lineage.growth",
    "masses": "lineage.growth",
    "estimate_growth": "lineage.growth_estimate",
    "InputError": "checks",
    "ComputationError": "checks",
    "ConvergenceError": "schrodinger.solution",
}

__all__ = [*_HOMES, "__version__"]

if TYPE_CHECKING:
    from .assessment.effective_sizes import effective_sizes as effective_sizes
    from .assessment.hold_out import hold_out as hold_out
    from .assessment.noise import choose_noise as choose_noise
    from .assessment.quantities import DensityAt as DensityAt
    from .assessment.quantities import DriftAt as DriftAt
    from .assessment.quantities import LinkProbabilities as LinkProbabilities
    from .assessment.quantities import Moments as Moments
    from .assessment.quantities import PathQuantiles as PathQuantiles
    from .assessment.relative_entropy import relative_entropy as relative_entropy
    from .assessment.surprise import prior_check as prior_check
    from .assessment.uncertainty import bootstrap as bootstrap
    from .assessment.uncertainty import influence as influence
    from .bridges.closed_form import gaussian_bridge as gaussian_bridge
    from .bridges.fit import SolverOptions as SolverOptions
    from .bridges.fit import fit_bridge as fit_bridge
    from .bridges.kinetic import fit_kinetic_bridge as fit_kinetic_bridge
    from .bridges.smooth import KernelEnds as KernelEnds
    from .bridges.smooth import MixtureEnds as MixtureEnds
    from .bridges.storage import load_bridge as load_bridge
    from .checks import ComputationError as ComputationError
    from .checks import InputError as InputError
    from .estimator import BridgeModel as BridgeModel
    from .lineage.annotate import annotate_cells as annotate_cells
    from .lineage.annotate import save_cells as save_cells
    from .lineage.fates import ancestors as ancestors
    from .lineage.fates import commitment as commitment
    from .lineage.fates import descendants as descendants
    from .lineage.fates import label_flows as label_flows
    from .lineage.features import early_features as early_features
    from .lineage.features import feature_trends as feature_trends
    from .lineage.growth import implied_growth as implied_growth
    from .lineage.growth import kept_weights as kept_weights
    from .lineage.growth import label_summary as label_summary
    from .lineage.growth import masses as masses
    from .lineage.growth_estimate import estimate_growth as estimate_growth
    from .lineage.uncertainty import LineageProbabilities as LineageProbabilities
    from .lineage.uncertainty import lineage_errors as lineage_errors
    from .links.candidates import LinkOptions as LinkOptions
    from .links.chain import chain_links as chain_links
    from .links.correlation import neighbour_correlation as neighbour_correlation
    from .links.estimate import EstimateOptions as EstimateOptions
    from .links.estimate import estimate_prior as estimate_prior
    from .links.link import link_particles as link_particles
    from .priors.box import Box as Box
    from .priors.brownian import Brownian as Brownian
    from .priors.kinetic import Kinetic as Kinetic
    from .priors.ornstein_uhlenbeck import OrnsteinUhlenbeck as OrnsteinUhlenbeck
    from .schrodinger.solution import ConvergenceError as ConvergenceError
    from .snapshots.files import read_snapshots as read_snapshots
    from .snapshots.files import write_snapshots as write_snapshots
    from .snapshots.growth import Growth as Growth
    from .snapshots.scaling import Scaling as Scaling
    from .snapshots.scaling import fit_scaling as fit_scaling
    from .snapshots.series import SnapshotSeries as SnapshotSeries


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        value = getattr(import_module(f".{_HOMES[name]}", __name__), name)
        globals()[name] = value
        return value
    raise AttributeError(f"module 'ensembles' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
