"""Results as tables, one row a thing.

Times and positions keep the names that the user's own table gave them, so that the tables can be joined with it and an
intermediate cloud can be read as a snapshot. Every derived column carries its unit in brackets, `mean_x [µm]`, where
the units are known. All can be taken back to the coordinates that a scaling was fitted to (`Coordinates`). Gaps are counted
from 0, as `Bridge.coupling` does; rows are those of the user's table, from 0.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from ..snapshots.summary import describe_snapshots
from .coordinates import Coordinates
from .wording import CAUTIONS, GROWTH_CAUTION, bracketed, gap_sentence, speed_unit, square_unit, warning_sentences

if TYPE_CHECKING:
    import pandas

    from ..bridges.bridge import Bridge
    from ..bridges.paths import Paths

__all__ = [
    "certificate_table",
    "clouds_table",
    "drift_table",
    "links_table",
    "moments_table",
    "paths_table",
    "summary",
]

_LARGEST_COVARIANCE = 10  # coordinates up to which all pairs have a column


def _frame(columns: Sequence[tuple[str, Any]]) -> pandas.DataFrame:
    """A data frame; a name already taken (a coordinate called "path", say) gets an underscore, so no column is lost."""
    import pandas

    named: dict[str, Any] = {}
    for name, values in columns:
        while name in named:
            name += "_"
        named[name] = values
    return pandas.DataFrame(named)


def _coordinates(
    shown: Coordinates, points: np.ndarray, prefix: str = "", unit: str = ""
) -> list[tuple[str, np.ndarray]]:
    names = shown.series.position_names
    return [(bracketed(f"{prefix}{name}", unit), points[:, axis]) for axis, name in enumerate(names)]


def links_table(bridge: Bridge, count: int = 3, back: Coordinates | None = None) -> pandas.DataFrame:
    """The `count` most probable targets of every particle, over all gaps; inferred under the prior, not observed.

    Returns
    -------
    DataFrame
        gap; source_row, target_row; probability : of the target given the source; mass : the entry of the coupling,
        whose entries sum to 1 in each gap; times, positions and (where there are any) labels of both.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [[0.0, 9.0], [0.5, 9.5]])
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5))
    >>> links_table(bridge, 1)[["source_row", "target_row", "probability"]].round(3).to_numpy().tolist()
    [[0.0, 2.0, 1.0], [1.0, 3.0, 1.0]]
    """
    import pandas

    series, shown = bridge.series, back or Coordinates(bridge.series)
    parts = []
    for gap in range(len(bridge.gaps)):
        links = bridge.coupling(gap).top_links(count)
        source, target = links["source"].to_numpy(), links["target"].to_numpy()
        columns: list[tuple[str, Any]] = [
            ("gap", np.full(len(links), gap)),
            ("source_row", series.rows[gap][source]),
            ("target_row", series.rows[gap + 1][target]),
            ("probability", links["probability"].to_numpy()),
            ("mass", links["mass"].to_numpy()),
            (f"source_{series.time_name}", np.full(len(links), series.times[gap])),
            (f"target_{series.time_name}", np.full(len(links), series.times[gap + 1])),
            *_coordinates(shown, shown.series.clouds[gap][source], "source_"),
            *_coordinates(shown, shown.series.clouds[gap + 1][target], "target_"),
        ]
        if series.labels is not None:
            columns += [("source_label", series.labels[gap][source]), ("target_label", series.labels[gap + 1][target])]
        parts.append(_frame(columns))
    return pandas.concat(parts, ignore_index=True)


def paths_table(bridge: Bridge, paths: Paths, back: Coordinates | None = None) -> pandas.DataFrame:
    """One row a path and time: the time, the position, the path, and the row of the particle it runs through.

    `row` is empty between snapshots.
    """
    import pandas

    series, shown = bridge.series, back or Coordinates(bridge.series)
    positions = shown.points(paths.positions)
    count, steps, dimension = positions.shape
    rows = np.full((count, steps), -1, dtype=np.int64)
    for k, t in enumerate(series.times):
        at = np.flatnonzero(paths.times == t)
        passes = paths.members[:, k] >= 0
        if at.size:
            rows[passes, at[0]] = series.rows[k][paths.members[passes, k]]
    return _frame(
        [
            (series.time_name, np.tile(paths.times, count)),
            *_coordinates(shown, positions.reshape(count * steps, dimension)),
            ("path", np.repeat(np.arange(count), steps)),
            ("row", pandas.Series(rows.ravel(), dtype="Int64").mask(rows.ravel() < 0)),
        ]
    )


def _stacked(times: Sequence[float] | np.ndarray, clouds: Sequence[np.ndarray]) -> tuple[np.ndarray, np.ndarray]:
    return np.repeat(np.asarray(times, dtype=float), [len(cloud) for cloud in clouds]), np.concatenate(clouds)


def clouds_table(
    bridge: Bridge, times: np.ndarray, clouds: Sequence[np.ndarray], back: Coordinates | None = None
) -> pandas.DataFrame:
    """One row a point of the clouds drawn at `times`: (T,) times and T arrays (n, d), as `Bridge.sample` gives them."""
    shown = back or Coordinates(bridge.series)
    time, points = _stacked(times, clouds)
    return _frame([(bridge.series.time_name, time), *_coordinates(shown, shown.points(points))])


def drift_table(
    bridge: Bridge, times: np.ndarray, clouds: Sequence[np.ndarray], back: Coordinates | None = None
) -> pandas.DataFrame:
    """Velocities at points of the population: one row a point of `clouds` (T arrays (n, d)) at `times` (T,).

    Returns
    -------
    DataFrame
        time and position; per coordinate `added_drift` (2D ∇log φ_t, what the snapshots add to the prior), `drift` (the
        whole forward drift) and `current_velocity` (that of the population), all in length/time.
    """
    forward = [bridge.drift(t, points) for t, points in zip(times, clouds)]
    current = [bridge.current_velocity(t, points) for t, points in zip(times, clouds)]
    time, points = _stacked(times, clouds)
    drift = np.concatenate(forward)
    shown = back or Coordinates(bridge.series)
    unit = speed_unit(shown.series)
    return _frame(
        [
            (bridge.series.time_name, time),
            *_coordinates(shown, shown.points(points)),
            *_coordinates(shown, shown.vectors(drift - bridge.prior.drift(points)), "added_drift_", unit),
            *_coordinates(shown, shown.vectors(drift), "drift_", unit),
            *_coordinates(shown, shown.vectors(np.concatenate(current)), "current_velocity_", unit),
        ]
    )


def moments_table(bridge: Bridge, times: np.ndarray, back: Coordinates | None = None) -> pandas.DataFrame:
    """Exact mean and variance of every coordinate at `times`; up to ten coordinates also all covariances."""
    moments = [bridge.moments(t) for t in times]
    shown = back or Coordinates(bridge.series)
    means = shown.points(np.array([mean for mean, _ in moments]))
    covariances = shown.covariance(np.array([covariance for _, covariance in moments]))
    names, square = shown.series.position_names, square_unit(shown.series)
    columns = [
        (bridge.series.time_name, np.asarray(times, dtype=float)),
        *_coordinates(shown, means, "mean_", shown.series.length_unit),
        *_coordinates(shown, np.diagonal(covariances, axis1=1, axis2=2), "variance_", square),
    ]
    if len(names) <= _LARGEST_COVARIANCE:
        for i, j in zip(*np.triu_indices(len(names), 1)):
            columns.append((bracketed(f"covariance_{names[i]}_{names[j]}", square), covariances[:, i, j]))
    return _frame(columns)


_CERTIFIED = (
    "row_error",
    "column_error",
    "marginal_error",
    "tolerance",
    "hilbert_step",
    "contraction_observed",
    "contraction_bound",
    "potential_error_bound",
    "potential_error_estimate",
)


def certificate_table(bridge: Bridge) -> pandas.DataFrame:
    """One row a gap: its times, outcome, sweeps, and the numbers of its `Certificate`.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [[0.0, 1.0], [0.5, 2.0]])
    >>> certificate_table(ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5)))["outcome"].tolist()
    ['converged']
    """
    import pandas

    times = bridge.series.times
    rows = []
    for gap, solution in enumerate(bridge.solutions):
        named = {"gap": gap, "from": float(times[gap]), "to": float(times[gap + 1])}
        numbers = {name: getattr(solution.certificate, name) for name in _CERTIFIED}
        rows.append(named | {"outcome": solution.outcome.value, "sweeps": solution.iterations} | numbers)
    return pandas.DataFrame(rows)


def summary(bridge: Bridge, back: Coordinates | None = None) -> dict[str, Any]:
    """What was bridged, under which prior, how exactly, and what to beware of; plain values ready for JSON.

    With `back` snapshots are described as they were measured, and "scaling" says in which coordinates the prior is.
    Numbers that are not finite, which JSON does not have, are None.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [[0.0, 1.0], [0.5, 2.0]])
    >>> summary(ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5)))["prior"]["parameters"]["diffusion"]
    0.5
    """
    series = bridge.series if back is None else back.series
    scaling = None if back is None or back.scaling is None else back.scaling.sentence
    found = {
        "converged": bridge.converged,
        "tolerance": bridge.tolerance,
        "columns": {"time": series.time_name, "position": list(series.position_names)},
        "units": {"time": series.time_unit, "length": series.length_unit, "velocity": speed_unit(series)},
        "snapshots": [
            {
                "time": snapshot.time,
                "particles": snapshot.count,
                "effective_sample_size": snapshot.effective_sample_size,
                "mass": snapshot.mass,
                "duplicates": snapshot.duplicates,
                "mean": snapshot.mean.tolist(),
                "spread": snapshot.spread.tolist(),
            }
            for snapshot in describe_snapshots(series)
        ],
        "scaling": scaling,
        "prior": {"kind": bridge.prior.kind, "parameters": bridge.prior.parameters(), "text": repr(bridge.prior)},
        "gaps": [
            row | {"sentence": gap_sentence(bridge, gap)}
            for gap, row in enumerate(certificate_table(bridge).to_dict(orient="records"))
        ],
        "warnings": warning_sentences(bridge),
        "notes": list(series.notes()),
        "cautions": [
            GROWTH_CAUTION if bridge.series.growth and "birth and death" in text else text for text in CAUTIONS
        ],
    }
    return _finite(found)


def _finite(value: Any) -> Any:
    """The same nest of dicts and lists with plain numbers, and None for those that are not finite."""
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_finite(item) for item in value]
    if isinstance(value, np.generic):
        value = value.item()
    return None if isinstance(value, float) and not np.isfinite(value) else value
