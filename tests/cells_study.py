"""Lineages of real cells, and of many: scripts/cells [hsmm] [branching] [scale] [--out FOLDER] [--count N]."""

import argparse
import resource
import time
from dataclasses import replace
from pathlib import Path

import branching
import numpy as np
import pandas as pd
from scipy.spatial.distance import cdist

import ensembles
from ensembles.report.figures.lineage import save_lineage_figures

DATA = Path(__file__).resolve().parents[1] / "data" / "hsmm_timecourse.csv"
GENES = ["log2tpm_MYH3", "log2tpm_CDK1", "log2tpm_PDGFRA", "log2tpm_SPHK1"]
COMPONENTS, NOISE_SHARE = 20, 0.1  # and the noise variance, of the mean squared distance across a gap
OTHERS = [(5, 0.1), (10, 0.05), (10, 0.1), (20, 0.05), (20, 0.1), (30, 0.05), (30, 0.1), (30, 0.3)]
HIGH_MYH3, HIGH = 5.0, 2.0  # log2(1 + TPM): about the median of MYH3 at 72 h; clearly expressed
UNCERTAINTY, LATER = 0.03, 1.0  # per hour: log-numbers ± 0.7 over a day; later weights ± a factor e


def labels_of(table):
    """Contaminant (PDGFRA and SPHK1 high), myotube (MYH3 high), proliferating (CDK1 high), or myoblast; in this order."""
    contaminant = (table["log2tpm_PDGFRA"] > HIGH) & (table["log2tpm_SPHK1"] > HIGH)
    return np.select(
        [contaminant, table["log2tpm_MYH3"] > HIGH_MYH3, table["log2tpm_CDK1"] > HIGH],
        ["contaminant", "myotube", "proliferating"],
        "myoblast",
    )


def hsmm_series(components=COMPONENTS):
    """The myoblasts of data/README.md in the first components, labelled by marker genes."""
    position = [f"PC{k}" for k in range(1, components + 1)]
    series = ensembles.read_snapshots(DATA, time="hours", position=position, features=GENES, units={"time": "h"})
    table = pd.read_csv(DATA)
    return replace(series, labels=tuple(labels_of(table.iloc[rows]).astype(str) for rows in series.rows))


def hsmm_prior(series, share=NOISE_SHARE):
    rates = [
        cdist(series.clouds[k], series.clouds[k + 1], "sqeuclidean").mean() / (2 * duration * series.dimension)
        for k, duration in enumerate(series.durations)
    ]
    return ensembles.Brownian(diffusion=float(share * np.mean(rates)))


def hsmm_bridges(components=COMPONENTS, share=NOISE_SHARE):
    """The bridge that must place every cell, and the one that may shed and grow."""
    series = hsmm_series(components)
    prior = hsmm_prior(series, share)
    growth = ensembles.Growth(0.0, uncertainty=UNCERTAINTY, later=LATER)
    return ensembles.fit_bridge(series, prior), ensembles.fit_bridge(series.with_growth(growth), prior)


def estimated_bridge(components=COMPONENTS, share=NOISE_SHARE):
    """The bridge with rates estimated as one smooth function of state, and what `estimate_growth` says of them."""
    series = hsmm_series(components)
    prior = hsmm_prior(series, share)
    found = ensembles.estimate_growth(series.with_growth(ensembles.Growth(0.0, later=LATER)), prior)
    return ensembles.fit_bridge(found.series, prior), found


def weight_kept(bridge):
    """Mean factor of contaminants and of the other later cells, at each time: (3, 2)."""
    kept = ensembles.kept_weights(bridge)
    table = kept.assign(contaminant=kept["label"] == "contaminant").pivot_table(
        index="time", columns="contaminant", values="kept"
    )
    return table.to_numpy()[:, ::-1]


def hsmm(folder):
    balanced, unbalanced = hsmm_bridges()
    print(balanced, "\n")
    for name, bridge in (("every cell placed", balanced), ("growth unknown, contaminants may be shed", unbalanced)):
        print(f"== {name}")
        quantity = ensembles.LineageProbabilities(by="label")
        errors = ensembles.lineage_errors(bridge, quantity, repeats=50)
        print("Label at 0 h to label at 72 h:")
        print(errors[["label", "to", "estimate", "standard_error", "lower", "upper"]].round(3).to_string(index=False))
        trends = ensembles.feature_trends(bridge, ["log2tpm_MYH3", "log2tpm_CDK1"], times=[0, 24, 48, 72])
        print("Expected log2(1 + TPM) along the histories of each label at 72 h:")
        print(trends.pivot_table(index=["feature", "label"], columns="time", values="mean").round(2).to_string(), "\n")
    smooth, found = estimated_bridge()
    names = (
        "every cell placed",
        "growth of each cell unknown, later cells may be shed",
        "growth smooth, later cells may be shed",
    )
    for name, bridge in zip(names, (balanced, unbalanced, smooth)):
        print(f"== by label: {name}")
        print(ensembles.label_summary(bridge).round(3).to_string(index=False))
    print(found)
    print("== does it depend on the choices? weight kept by contaminants / by the others at 24, 48, 72 h")
    shown = lambda bridge: "   ".join(f"{own:.2f} / {rest:.2f}" for own, rest in weight_kept(bridge))  # noqa: E731
    for components, share in OTHERS:
        print(
            f"{components:3d} components, noise share {share:4.2f}:  each cell  {shown(hsmm_bridges(components, share)[1])}"
        )
        print(f"{'':32s}  smooth     {shown(estimated_bridge(components, share)[0])}")
    early = ensembles.early_features(balanced, GENES)
    print("== early genes and later labels")
    print(early.round(4).to_string(index=False))
    print(early.attrs["caveat"])
    for name, bridge in (("placed", balanced), ("shed", unbalanced)):
        place = folder / name
        place.mkdir(parents=True, exist_ok=True)
        trends = ensembles.feature_trends(bridge, ["log2tpm_MYH3", "log2tpm_CDK1"], paths=2000)
        growth = ensembles.implied_growth(bridge) if bridge is unbalanced else None
        flows = ensembles.label_flows(bridge)
        for file, caption in save_lineage_figures(place, bridge.series, flows=flows, trends=trends, growth=growth):
            print(f"{place / file}: {caption}")


def calibration(_folder):
    for count, seed in ((2000, 0), (2000, 1), (2000, 2), (500, 0), (500, 1), (500, 2), (500, 3)):
        truth = branching.simulate(count, seed)
        nearest = branching.nearest_neighbours(truth.series)
        scores = {"true chance": truth.chance, "nearest neighbour": nearest} | branching.predictions(truth)
        print(f"== branching cells, seed {seed}: {count} cells a snapshot")
        for name, prediction in scores.items():
            said, seen, counted = branching.reliability(prediction, truth)
            errors = branching.bin_errors(prediction, truth)
            off = ", ".join(f"{a:.2f}/{b:.2f}" if n else "-" for a, b, n in zip(said, seen, counted))
            print(
                f"{name:23s} Brier {branching.brier(prediction, truth):.4f}   furthest off {np.nanmax(np.abs(said - seen)):.3f}"
                f"   said/seen {off}   (standard errors at most {np.nanmax(errors[0]):.3f}/{np.nanmax(errors[1]):.3f})",
                flush=True,
            )
        found = ensembles.estimate_growth(truth.series, ensembles.Brownian(diffusion=branching.DIFFUSION))
        true = [branching.net_rate(cloud) for cloud in truth.series.clouds]
        offset = np.concatenate(true[:-1]).mean()
        z = np.concatenate([(r - t + offset) / e for r, t, e in zip(found.rates, true, found.errors)])
        slope = np.polyfit(np.concatenate(true), np.concatenate(found.rates), 1)[0]
        z = np.sqrt(np.mean(z**2))
        print(
            f"{found}\nslope against the true rates {slope:.2f}; root mean square of (estimate - true) / error {z:.2f}"
        )


def scale(_folder, count=20_000, dimension=30):
    """Four snapshots of `count` cells in 30 components: every lineage table, with its time and the peak of memory."""
    rng = np.random.default_rng(0)
    side = rng.integers(0, 2, count)
    spread = 1.0 / np.sqrt(1.0 + np.arange(dimension))
    clouds, labels, features = [], [], []
    for k in range(4):
        cloud = rng.normal(size=(count, dimension)) * spread
        cloud[:, 0] += 0.8 * k
        cloud[:, 1] += 0.8 * k * (2 * side - 1)
        clouds.append(cloud)
        labels.append(np.where(k * side > 1, "upper", np.where(k > 1, "lower", "early")))
        features.append(cloud[:, 1] + rng.normal(size=count))
    series = ensembles.SnapshotSeries.from_arrays([0, 1, 2, 3], clouds, labels=labels, features={"gene": features})
    begun = last = time.perf_counter()

    def done(what):
        nonlocal last
        now = time.perf_counter()
        memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
        print(f"{what:34s} {now - last:8.1f} s   in all {now - begun:8.1f} s   peak {memory:.2f} GB", flush=True)
        last = now

    bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.1))
    done(f"fit, {count} cells x 4, {dimension} components")
    ensembles.descendants(bridge)
    done("descendants over three gaps")
    ensembles.ancestors(bridge)
    done("ancestors over three gaps")
    ensembles.label_flows(bridge)
    done("flows")
    ensembles.feature_trends(bridge, paths=1000)
    done("feature along histories")
    ensembles.early_features(bridge)
    done("early features")
    print([solution.iterations for solution in bridge.solutions], "sweeps a gap")


STUDIES = {"hsmm": hsmm, "branching": calibration, "scale": scale}

if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("studies", nargs="*", choices=[*STUDIES, []], help="all if left out")
    parser.add_argument("--out", type=Path, default=Path("demo_output/cells"))
    parser.add_argument("--count", type=int, default=20_000, help="cells a snapshot of the scale study")
    chosen = parser.parse_args()
    for name in chosen.studies or STUDIES:
        STUDIES[name](chosen.out, chosen.count) if name == "scale" else STUDIES[name](chosen.out)
