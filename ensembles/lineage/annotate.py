"""Results written back to AnnData: columns of .obs, tables of .obsm, facts in .uns, all named ensembles_*."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..snapshots.cells import require_anndata
from ..snapshots.stages import stage_times
from ..writing import atomic_path
from .fates import ancestors, commitment, descendants, label_flows
from .growth import implied_growth, kept_weights
from .labels import label_notes, labels_at

if TYPE_CHECKING:
    import pandas

    from ..bridges.bridge import Bridge
    from ..snapshots.series import SnapshotSeries

__all__ = ["annotate_cells", "save_cells"]


def annotate_cells(bridge: Bridge, cells: Any = None) -> Any:
    """Write what a bridge says of every cell into a copy of an AnnData object.

    .obs: ensembles_time, ensembles_fate and ensembles_origin (most probable label at the last and the first snapshot),
    their ensembles_*_probability and ensembles_*_entropy (nats), ensembles_given_growth and ensembles_implied_growth
    (1/time), ensembles_kept. .obsm: ensembles_positions, ensembles_descendants and ensembles_ancestors, whose columns
    .uns["ensembles"] names, with flows, prior and notes. Cells without a value (no later snapshot, not in the series)
    hold NaN.

    Parameters
    ----------
    bridge : a bridge between particles of a series with labels.
    cells : the AnnData object that the series was read from, in any order: cells are found by their names, or by row number
        where the series has no names. Without it a new object without .X is made of the particles, under their names in the
        file or their rows.

    Returns
    -------
    AnnData : a copy; `cells` is not changed.

    Raises
    ------
    InputError
        If anndata is not installed, or `cells` are not those of the series: names or rows that are missing, other times.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 4.0], [0.0, 4.0]], labels=[["a", "a"], ["b", "c"]])
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.2))
    >>> ensembles.annotate_cells(bridge).obs["ensembles_fate"].tolist()
    ['b', 'c', 'b', 'c']
    """
    anndata = require_anndata()
    import pandas

    series = bridge.series
    rows = np.concatenate(series.rows)
    if cells is None:
        called = map(str, rows) if series.names is None else np.concatenate(series.names)
        names = pandas.DataFrame(index=list(called))
        target, place = anndata.AnnData(obs=names), np.arange(rows.size)
    else:
        target, place = cells.copy(), _places(series, cells)
    columns, tables, facts = _content(bridge)
    for name, values in columns.items():
        text = values.dtype == object
        full = np.full(target.n_obs, "" if text else np.nan, dtype=object if text else float)
        full[place] = values
        target.obs[f"ensembles_{name}"] = full
    for name, table in tables.items():
        full = np.full((target.n_obs, table.shape[1]), np.nan)
        full[place] = table
        target.obsm[f"ensembles_{name}"] = full
    target.uns["ensembles"] = facts
    return target


def _places(series: SnapshotSeries, cells: Any) -> np.ndarray:
    """The row in `cells` of every particle of the series, those of all snapshots one after the other."""
    remedy = "give the object that the series was read from"
    if series.names is not None:
        names = np.concatenate(series.names)
        place = np.asarray(cells.obs_names.astype(str).get_indexer(names))
        if (place < 0).any():
            raise checks.InputError(
                f"the cells are not those of the bridge; {int((place < 0).sum())} of {names.size} names are missing, the first "
                f"is {str(names[place < 0][0])!r}; {remedy}"
            )
    else:
        place = np.concatenate(series.rows)
        if place.max() >= cells.n_obs:
            raise checks.InputError(
                f"the cells are not those of the bridge; there are {cells.n_obs} where the series refers to row {place.max()}; "
                f"{remedy}"
            )
    if series.time_name in cells.obs:
        found = stage_times(np.asarray(cells.obs[series.time_name])[place], series.time_name)[0]
        own = np.repeat(series.times, series.counts)
        if (other := found != own).any():
            first = int(np.argmax(other))
            raise checks.InputError(
                f"the cells are not those of the bridge; row {place[first]} has {series.time_name} = {found[first]:g} where the "
                f"series has {own[first]:g} ({int(other.sum())} such cell(s)); {remedy}, in the same order"
            )
    return place


def _content(bridge: Bridge) -> tuple[dict[str, np.ndarray], dict[str, np.ndarray], dict[str, Any]]:
    series = bridge.series
    last = len(series) - 1
    forward = [descendants(bridge, k, last) for k in range(last)]
    backward = [ancestors(bridge, 0, k) for k in range(1, last + 1)]
    own = [_own(bridge, last), _own(bridge, 0)]
    fates = [commitment(table) for table in (*forward, own[0])]
    origins = [commitment(table) for table in (own[1], *backward)]
    columns = {"time": np.repeat(series.times, series.counts)}
    for name, found in (("fate", fates), ("origin", origins)):
        columns[name] = np.concatenate([table["label"].to_numpy(dtype=object) for table in found])
        columns[f"{name}_probability"] = np.concatenate([table["probability"] for table in found])
        columns[f"{name}_entropy"] = np.concatenate([table["entropy"] for table in found])
    if series.growth is not None:
        growth, kept = implied_growth(bridge), kept_weights(bridge)
        ends, begins = np.full(series.counts[-1], np.nan), np.full(series.counts[0], np.nan)
        columns["given_growth"] = np.concatenate([growth["given"], ends])
        columns["implied_growth"] = np.concatenate([growth["implied"], ends])
        columns["kept"] = np.concatenate([begins, kept["kept"]])
    tables = {
        "positions": np.concatenate(series.clouds),
        "descendants": np.concatenate([*forward, own[0]]),
        "ancestors": np.concatenate([own[1], *backward]),
    }
    flows = label_flows(bridge)
    facts = {
        "prior": repr(bridge.prior),
        "times": np.array(series.times),
        "time_unit": series.time_unit,
        "position_names": np.array(series.position_names, dtype=object),
        "descendant_labels": np.array(own[0].columns, dtype=object),
        "ancestor_labels": np.array(own[1].columns, dtype=object),
        "notes": np.array([*bridge.notes, *label_notes(series)], dtype=object),
        "flows": flows,
    }
    return columns, tables, facts


def _own(bridge: Bridge, snapshot: int) -> pandas.DataFrame:
    """A particle's own label, as certain."""
    import pandas

    found = labels_at(bridge.series, snapshot)
    return pandas.DataFrame(found.indicators, columns=list(found.names))


def save_cells(cells: Any, path: str | Path) -> None:
    """Write an AnnData object as .h5ad, under a temporary name until it is whole."""
    place = Path(path)
    if place.suffix != ".h5ad":
        raise checks.InputError(f"AnnData is saved as .h5ad; the name is {place.name!r}; end it in .h5ad")
    with atomic_path(place) as temporary:
        cells.write_h5ad(temporary)
