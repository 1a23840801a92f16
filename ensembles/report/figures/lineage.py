"""Lineage as pictures: flow between labels, features along the way to each label, implied growth against given."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import to_rgba
from matplotlib.figure import Figure
from matplotlib.patches import Patch, PathPatch, Rectangle
from matplotlib.path import Path as Outline

from ...lineage.labels import UNLABELLED
from ..wording import gap_title, time_axis_name
from .saving import save_drawing
from .style import GREY, INK, MARKERS, WIDTH, panel_grid, plain, set_title

if TYPE_CHECKING:
    import pandas

    from ...snapshots.series import SnapshotSeries

__all__ = ["draw_flow", "draw_growth", "draw_trends", "save_lineage_figures"]

# Okabe and Ito's colours (from memory), told apart with any colour vision, in an order of changing lightness.
_LABELS = ("#0072b2", "#e69f00", "#009e73", "#cc79a7", "#56b4e9", "#d55e00", "#444444", "#c9b800")
_DASHES: tuple[Any, ...] = ("-", (0, (5, 1.4)), (0, (6, 1.2, 1, 1.2)), (0, (1, 1)), (0, (3, 1)), (0, (8, 1.5)),
                            (0, (4, 1, 1, 1, 1, 1)), (0, (2, 2)))  # fmt: skip
_HATCHES = ("", "//", r"\\\\", "..", "--", "||", "xx", "++")
_MOST_LABELS = 8
_OTHERS = "others"
_SPACE, _BLOCK = 0.02, 0.05  # between blocks, of the whole; width of a block, of the shortest gap
_MOST_FEATURES = 6


def _shown(names: list[str], sizes: np.ndarray) -> list[str]:
    """Names that have a colour of their own: all, or the largest."""
    if len(names) <= _MOST_LABELS:
        return names
    large = set(np.argsort(-sizes)[: _MOST_LABELS - 1].tolist())
    return [name for k, name in enumerate(names) if k in large]


def draw_flow(figure: Figure, flows: pandas.DataFrame, series: SnapshotSeries) -> str:
    """Draw blocks of labels at each snapshot and bands of mass between them; returns the caption."""
    figure.set_size_inches(WIDTH, 4.2)
    ax = figure.subplots()
    names = sorted({*flows["earlier_label"], *flows["later_label"]})
    sizes = np.array([
        flows.loc[flows["earlier_label"] == name, "mass"].sum() + flows.loc[flows["later_label"] == name, "mass"].sum()
        for name in names
    ])  # fmt: skip
    shown = _shown(names, sizes)
    order = shown + ([_OTHERS] if len(shown) < len(names) else [])
    colour = {name: _LABELS[k % len(_LABELS)] for k, name in enumerate(shown)} | {_OTHERS: GREY}
    table = flows.assign(
        early=flows["earlier_label"].where(flows["earlier_label"].isin(shown), _OTHERS),
        late=flows["later_label"].where(flows["later_label"].isin(shown), _OTHERS),
    )
    width = _BLOCK * float(series.durations.min())
    shares = _snapshot_shares(table, order, series)
    for k, share in shares.items():
        _draw_blocks(ax, series.times[k], width, share, order, colour, k == max(shares))
    for gap, part in table.groupby("gap"):
        mass = part.pivot_table(index="early", columns="late", values="mass", aggfunc="sum")
        matrix = mass.reindex(index=order, columns=order).fillna(0.0).to_numpy()
        _draw_bands(ax, series, int(gap), matrix, (shares[int(gap)], shares[int(gap) + 1]), width, order, colour)
    ax.set_xticks(series.times, [f"{t:g}" for t in series.times])
    ax.set_yticks([])
    figure.supylabel("share of the snapshot")  # outside the names of the first blocks
    ax.spines["left"].set_visible(False)
    ax.set_xlabel(plain(time_axis_name(series)))
    ax.set_xlim(series.times[0] - 2 * width, series.times[-1] + 2 * width + 0.16 * np.ptp(series.times))
    ax.set_ylim(1.0 + _SPACE * (len(order) + 1), -_SPACE)
    others = "" if len(shown) == len(names) else f" The {len(names) - len(shown)} rarest labels are drawn as one."
    return (
        "Flow between labels along time. Blocks: share of each label in a snapshot (where later weights may depart, as the "
        "bridge weighs it). Bands: where the mass of a block goes in "
        "the next snapshot, coloured by the earlier label; a band that widens belongs to a label whose share grows."
        f"{others} Flows are inferences under the prior, not observed lineages."
    )


def _snapshot_shares(table: pandas.DataFrame, order: list[str], series: SnapshotSeries) -> dict[int, np.ndarray]:
    """Share of each label at every snapshot that a flow begins or ends at: its own at first, then that of the arriving mass."""
    found: dict[int, np.ndarray] = {}
    for gap, part in table.groupby("gap"):
        if int(gap) not in found and series.labels is not None:
            names = part.drop_duplicates("earlier_label").set_index("earlier_label")["early"]
            own = names.reindex([str(name) or UNLABELLED for name in series.labels[int(gap)]]).to_numpy()
            found[int(gap)] = np.array([series.weights[int(gap)][own == name].sum() for name in order])
        found[int(gap) + 1] = part.groupby("late")["mass"].sum().reindex(order).fillna(0.0).to_numpy()
    return found


def _tops(share: np.ndarray) -> np.ndarray:
    """Upper edges of blocks stacked downwards."""
    return np.concatenate([[0.0], np.cumsum(share + _SPACE)[:-1]])


def _draw_blocks(
    ax: Axes, t: float, width: float, share: np.ndarray, order: list[str], colour: dict[str, str], last: bool
) -> None:
    for name, top, height in zip(order, _tops(share), share):
        if height <= 0:
            continue
        ax.add_patch(Rectangle((t - width, top), 2 * width, height, color=colour[name], lw=0))
        if height > 0.03:
            side = 1.3 if last else -1.3
            ax.text(t + side * width, top + 0.5 * height, plain(f"{name} {100 * height:.0f} %"), va="center",
                    ha="left" if last else "right", fontsize=7, color=INK, zorder=5,
                    bbox={"facecolor": "white", "alpha": 0.7, "lw": 0, "pad": 0.6})  # fmt: skip


def _draw_bands(
    ax: Axes,
    series: SnapshotSeries,
    gap: int,
    mass: np.ndarray,
    shares: tuple[np.ndarray, np.ndarray],
    width: float,
    order: list[str],
    colour: dict[str, str],
) -> None:
    """Bands fill the earlier block whatever its growth, and the later block by the mass that arrives."""
    rows = mass.sum(axis=1, keepdims=True)
    leaving = np.divide(mass, rows, out=np.zeros_like(mass), where=rows > 0) * shares[0][:, None]
    columns = mass.sum(axis=0, keepdims=True)
    arriving = np.divide(mass, columns, out=np.zeros_like(mass), where=columns > 0) * shares[1][None, :]
    start = _tops(shares[0])[:, None] + np.cumsum(leaving, axis=1) - leaving
    end = _tops(shares[1])[None, :] + np.cumsum(arriving, axis=0) - arriving
    x0, x1 = series.times[gap] + width, series.times[gap + 1] - width
    middle = 0.5 * (x0 + x1)
    for (i, j), value in np.ndenumerate(mass):
        if value < 5e-4:
            continue
        a, b, c, d = start[i, j], start[i, j] + leaving[i, j], end[i, j], end[i, j] + arriving[i, j]
        points = [(x0, a), (middle, a), (middle, c), (x1, c), (x1, d), (middle, d), (middle, b), (x0, b), (x0, a)]
        codes = [Outline.MOVETO, *[Outline.CURVE4] * 3, Outline.LINETO, *[Outline.CURVE4] * 3, Outline.CLOSEPOLY]
        ax.add_patch(PathPatch(Outline(points, codes), facecolor=colour[order[i]], alpha=0.45, lw=0))


def draw_trends(figure: Figure, trends: pandas.DataFrame, series: SnapshotSeries) -> str:
    """Draw mean and band of each feature along time, one line a final label; returns the caption."""
    features = list(dict.fromkeys(trends["feature"]))
    shown = features[:_MOST_FEATURES]
    labels = list(dict.fromkeys(trends["label"]))[:_MOST_LABELS]
    axes = panel_grid(figure, len(shown), 0.75, share=False, most=3, above=0.35)
    for ax, name in zip(axes, shown):
        for k, label in enumerate(labels):
            part = trends[(trends["feature"] == name) & (trends["label"] == label)]
            # Bands overlap: each has an edge in the line's own dashes, and a hatching for those who see no colours.
            ax.fill_between(part["time"], part["lower"], part["upper"], facecolor=to_rgba(_LABELS[k], 0.15), lw=0,
                            edgecolor=to_rgba(_LABELS[k], 0.4), hatch=_HATCHES[k])  # fmt: skip
            for edge in ("lower", "upper"):
                ax.plot(part["time"], part[edge], color=_LABELS[k], lw=0.7, ls=_DASHES[k])
            ax.plot(part["time"], part["mean"], color=_LABELS[k], lw=1.6, ls=_DASHES[k], marker=MARKERS[k], markevery=6,
                    ms=4, mec="white", mew=0.4, label=plain(str(label)), zorder=3)  # fmt: skip
        set_title(ax, name)
    figure.supxlabel(plain(time_axis_name(series)))
    lines, words = axes[0].get_legend_handles_labels()
    patches = [Patch(facecolor=to_rgba(_LABELS[k], 0.15), edgecolor=to_rgba(_LABELS[k], 0.4), hatch=_HATCHES[k], lw=0)
               for k in range(len(lines))]  # fmt: skip
    handles: list[Any] = list(zip(patches, lines))
    figure.legend(handles, words, loc="outside upper right", ncols=min(len(labels), 5),
                  handlelength=3.2, handleheight=1.2)  # fmt: skip
    left_out = [
        f"{len(whole) - len(part)} further {what} are in the table only"
        for what, whole, part in (
            ("features", features, shown),
            ("labels", list(dict.fromkeys(trends["label"])), labels),
        )
        if len(part) < len(whole)
    ]
    more = f" {'; '.join(left_out)}." if left_out else ""
    return (
        "Features along the histories that end in each label. Line: expected value at each time, given the label at the "
        "last snapshot; band: 5 to 95 % of drawn histories. Between snapshots a history's value is interpolated between "
        f"the two cells that the coupling joins.{more} Histories are inferences under the prior."
    )


def draw_growth(figure: Figure, growth: pandas.DataFrame, series: SnapshotSeries) -> str:
    """Draw the implied net growth rate of every particle against the given one; returns the caption."""
    gaps = sorted(growth["gap"].unique())[:6]
    axes = panel_grid(figure, len(gaps), 0.9, share=False, most=3, above=0.3)
    labels = sorted(growth["label"].unique())[:_MOST_LABELS] if "label" in growth else [None]
    finite = growth[np.isfinite(growth["implied"]) & np.isfinite(growth["given"])]
    flat = np.ptp(finite["given"]) < 1e-9 * (1.0 + finite["given"].abs().max())
    rng = np.random.default_rng(0)
    for ax, gap in zip(axes, gaps):
        here = finite[finite["gap"] == gap]
        for k, label in enumerate(labels):
            part = here if label is None else here[here["label"] == label]
            # One given rate for all says nothing along its axis: the labels stand there instead.
            x = k + rng.uniform(-0.3, 0.3, len(part)) if flat else part["given"]
            ax.scatter(x, part["implied"], s=10, color=_LABELS[k], marker=MARKERS[k % len(MARKERS)], alpha=0.75, lw=0,
                       label=plain(str(label)), rasterized=True)  # fmt: skip
        if flat:
            ax.axhline(float(here["given"].iloc[0]), color=GREY, lw=0.8, ls="--")
            ax.set_xticks(range(len(labels)), [plain(str(label or "")) for label in labels], rotation=35, ha="right")
        else:
            low, high = float(here["given"].min()), float(here["given"].max())
            ax.plot([low, high], [low, high], color=GREY, lw=0.8, ls="--")
        set_title(ax, gap_title(series, int(gap)))
    unit = f" (1/{series.time_unit})" if series.time_unit else ""
    figure.supylabel(f"implied net growth rate{unit}")
    if not flat:
        figure.supxlabel(f"given net growth rate{unit}")
        if labels != [None]:
            figure.legend(*axes[0].get_legend_handles_labels(), loc="outside upper right", ncols=min(len(labels), 5),
                          markerscale=1.6)  # fmt: skip
    lost = int((growth["implied"] == -np.inf).sum())
    gone = f" {lost} particle(s) that leave nothing are not drawn." if lost else ""
    across = "the labels, since one rate was given for all" if flat else "the given rate"
    return (
        f"Implied growth of every particle over each gap, against {across}. Rates are relative to the population's; on the "
        f"dashed line the data ask for no other growth than the given.{gone} A rate far below the line belongs to a particle "
        "for which the bridge finds little offspring."
    )


def save_lineage_figures(
    folder: str | Path,
    series: SnapshotSeries,
    *,
    flows: pandas.DataFrame | None = None,
    trends: pandas.DataFrame | None = None,
    growth: pandas.DataFrame | None = None,
    dpi: int = 200,
) -> list[tuple[str, str]]:
    """Draw what is given into `folder` as flow.png, trends.png and growth.png.

    Returns
    -------
    list of (file name, caption).

    Examples
    --------
    >>> import tempfile, ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 4.0], [0.0, 4.0]], labels=[["a", "a"], ["b", "c"]])
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=1.0))
    >>> folder = tempfile.mkdtemp()
    >>> [name for name, _ in save_lineage_figures(folder, series, flows=ensembles.label_flows(bridge), dpi=40)]
    ['flow.png']
    """
    wanted = (("flow", draw_flow, flows), ("trends", draw_trends, trends), ("growth", draw_growth, growth))
    return [
        save_drawing(folder, name, draw, table, series, dpi=dpi) for name, draw, table in wanted if table is not None
    ]
