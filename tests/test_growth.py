"""Growth and death: the tilt of the weights, rates roughly known, what is shed, masses, files, refusals."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

import ensembles
from ensembles import Growth

PRIOR = ensembles.Brownian(diffusion=0.4)


def growing(seed=0, counts=(60, 70, 50), **growth):
    rng = np.random.default_rng(seed)
    clouds = [rng.normal(0.3 * k, 1.0, (n, 2)) for k, n in enumerate(counts)]
    features = {
        "net": [0.5 * cloud[:, 0] for cloud in clouds],
        "birth": [1.0 + np.maximum(cloud[:, 0], 0) for cloud in clouds],
        "death": [np.full(len(cloud), 0.7) for cloud in clouds],
    }
    labels = [np.where(cloud[:, 0] > 0, "right", "left") for cloud in clouds]
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0, 2.5], clouds, labels=labels, features=features)
    return series.with_growth(Growth(**growth)) if growth else series


def test_the_tilt_is_the_balanced_bridge_of_tilted_weights():
    series = growing(rate="net")
    bridge = ensembles.fit_bridge(series, PRIOR, tolerance=1e-10)
    for gap, duration in enumerate([1.0, 1.5]):
        tilted = np.exp(series.features["net"][gap] * duration)
        tilted /= tilted.sum()
        by_hand = ensembles.SnapshotSeries.from_arrays([0.0, duration], series.clouds[gap : gap + 2], [tilted, None])
        expected = ensembles.fit_bridge(by_hand, PRIOR, tolerance=1e-10).coupling(0).matrix()
        assert_allclose(bridge.coupling(gap).matrix(), expected, atol=1e-11)
    assert bridge.converged
    assert any("exp(rate × duration)" in note for note in bridge.notes)


def test_birth_and_death_are_their_difference():
    series = growing(birth="birth", death="death")
    expected = series.features["birth"][0] - 0.7
    assert_allclose(series.growth.rates(series, 0), expected)
    assert_allclose(growing(death=0.2).growth.rates(series, 1), -0.2)


def test_a_constant_rate_changes_the_mass_and_nothing_else():
    # Killing at a constant rate V: the survivors' coupling is unchanged, the mass is e^(-VT) (derived).
    series = growing()
    plain = ensembles.fit_bridge(series, PRIOR, tolerance=1e-10)
    killed = ensembles.fit_bridge(series.with_growth(Growth(-0.3)), PRIOR, tolerance=1e-10)
    for gap in (0, 1):
        assert_allclose(killed.coupling(gap).matrix(), plain.coupling(gap).matrix(), atol=1e-12)
    assert_allclose(ensembles.masses(killed)["from_first"], 60 * np.exp([0.0, -0.3, -0.75]), rtol=1e-12)
    assert_allclose(ensembles.masses(plain)["from_before"][1:], [60.0, 70.0])
    assert (ensembles.implied_growth(plain)["implied"].abs() < 1e-9).all()


def test_rates_known_well_are_the_rates():
    exact = ensembles.fit_bridge(growing(rate="net"), PRIOR, tolerance=1e-9)
    off = []
    for uncertainty in (1e-1, 1e-2, 1e-3):
        rough = ensembles.fit_bridge(growing(rate="net", uncertainty=uncertainty), PRIOR, tolerance=1e-7)
        assert rough.converged
        off.append(np.abs(rough.coupling(0).matrix() - exact.coupling(0).matrix()).sum())
    assert off[0] > off[1] > off[2]
    assert off[2] < 1e-4


def test_unknown_rates_are_found():
    # Two far groups of 50 that become 20 and 80 particles: the rates are log(0.4) and log(1.6), nothing was told.
    rng = np.random.default_rng(3)
    early = np.concatenate([rng.normal(-5, 0.5, 50), rng.normal(5, 0.5, 50)])
    late = np.concatenate([rng.normal(-5, 0.5, 20), rng.normal(5, 0.5, 80)])
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [early, late])
    bridge = ensembles.fit_bridge(series.with_growth(Growth(uncertainty=2.0)), PRIOR)
    implied = ensembles.implied_growth(bridge)["implied"].to_numpy()
    kept = np.exp(implied)
    assert_allclose([kept[:50].mean(), kept[50:].mean()], [0.4, 1.6], rtol=0.02)
    # Ignored, the growth forces a quarter of the left group to the right.
    ignored = ensembles.fit_bridge(series, PRIOR)
    moved = ignored.coupling(0).matrix()[:50, 20:].sum()
    assert_allclose(moved, 0.3, rtol=1e-3)
    assert bridge.coupling(0).matrix()[:50, 20:].sum() < 0.01


def test_contaminants_are_shed():
    rng = np.random.default_rng(5)
    early, late = rng.normal(0, 1, (80, 2)), rng.normal(0.5, 1, (90, 2))
    late[:6] += 14.0
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [early, late])
    bridge = ensembles.fit_bridge(series.with_growth(Growth(uncertainty=1.0, later=1.0)), PRIOR)
    kept = ensembles.kept_weights(bridge)["kept"].to_numpy()
    assert (kept[:6] < 1e-3).all() and np.median(kept[6:]) > 0.5
    assert bridge.converged
    certificate = bridge.solutions[0].certificate
    pi = bridge.coupling(0).matrix()
    error = max(np.abs(pi.sum(axis=1 - side) - bridge.gap_weights[0][side]).sum() for side in (0, 1))
    assert error <= 1e-6
    assert_allclose(error, certificate.marginal_error, rtol=1e-3, atol=1e-13)


def test_displacement_and_the_summary_by_label():
    bridge = ensembles.fit_bridge(growing(rate="net", uncertainty=0.3, later=0.5), PRIOR, tolerance=1e-9)
    series, kept = bridge.series, ensembles.kept_weights(bridge)
    pi = bridge.coupling(1).matrix()
    squared = ((series.clouds[1][:, None] - series.clouds[2]) ** 2).sum(axis=2) / (2 * 0.4 * 1.5)
    expected = np.sqrt((pi * squared).sum(axis=0) / pi.sum(axis=0) / 2)
    assert_allclose(kept.loc[kept["gap"] == 1, "displacement"], expected, rtol=1e-6)
    table = ensembles.label_summary(bridge).set_index(["time", "label"])
    right = series.labels[1] == "right"
    row = table.loc[(1.0, "right")]
    assert row["particles"] == right.sum()
    assert_allclose(row["kept"], bridge.gap_weights[0][1][right].sum() / series.weights[1][right].sum(), rtol=1e-9)
    factor = bridge.gap_weights[1][0][right].sum() / series.weights[1][right].sum()
    assert_allclose(row["implied_growth"], np.log(factor) / 1.5, rtol=1e-9)
    assert np.isnan(table.loc[(0.0, "left"), "kept"]) and np.isnan(table.loc[(2.5, "left"), "implied_growth"])
    # What the prior itself does has displacement 1: each later particle the draw of one earlier one, 6 standard errors.
    rng = np.random.default_rng(0)
    early = np.linspace(0, 800, 101)[:, None] * np.ones(2)
    late = early + rng.normal(0, np.sqrt(2 * 0.4), early.shape)
    moved = ensembles.fit_bridge(ensembles.SnapshotSeries.from_arrays([0, 1], [early, late]), PRIOR)
    assert abs((ensembles.kept_weights(moved)["displacement"] ** 2).mean() - 1) < 6 / np.sqrt(101)
    with pytest.raises(ensembles.InputError, match="a summary by label needs labels; the series has none"):
        ensembles.label_summary(moved)


def test_descendants_over_two_gaps_count_by_their_own_descendants():
    bridge = ensembles.fit_bridge(growing(rate="net"), PRIOR, tolerance=1e-11)
    first, second = bridge.coupling(0).matrix(), bridge.coupling(1).matrix()
    weights = bridge.series.weights
    joint = (first / weights[1]) @ second  # mass of the pairs (particle at the start, descendant at the end)
    late = bridge.series.labels[2][:, None] == np.unique(bridge.series.labels[2])
    expected = joint @ late / joint.sum(axis=1, keepdims=True)
    assert_allclose(ensembles.descendants(bridge).to_numpy(), expected, atol=1e-9)
    assert_allclose(joint.sum(axis=0), weights[2], rtol=1e-8)
    early = bridge.series.labels[0][:, None] == np.unique(bridge.series.labels[0])
    assert_allclose(ensembles.ancestors(bridge).to_numpy(), (joint / joint.sum(axis=0)).T @ early, atol=1e-9)
    # Rates that differ make this another table than that of the conditional laws, one after the other.
    naive = (first / first.sum(axis=1, keepdims=True)) @ (second / second.sum(axis=1, keepdims=True)) @ late
    assert np.abs(naive - expected).max() > 0.05
    by_label = ensembles.LineageProbabilities(by="label").evaluate(bridge)
    mass = early.T @ joint @ late
    assert_allclose(by_label, (mass / mass.sum(axis=1, keepdims=True)).ravel(), atol=1e-8)


def test_paths_are_the_histories_of_the_last_snapshot():
    bridge = ensembles.fit_bridge(growing(rate="net", uncertainty=0.5), PRIOR)
    count = 30_000
    paths = bridge.sample_paths(count, [0.0, 0.5, 1.0, 2.5], rng=1)
    joint = (bridge.coupling(0).matrix() / bridge.gap_weights[0][1]) @ bridge.coupling(1).matrix()
    for k, expected in ((0, joint.sum(axis=1)), (2, bridge.series.weights[2])):
        seen = np.bincount(paths.members[:, k], minlength=expected.size) / count
        assert (np.abs(seen - expected) < 6 * np.sqrt(expected / count)).all()
    assert_allclose(paths.positions[:, 2], bridge.series.clouds[1][paths.members[:, 1]], rtol=0)
    # Negative control: the first snapshot's own weights are others.
    assert np.abs(bridge.series.weights[0] - joint.sum(axis=1)).max() > 6 * np.sqrt(1 / 60 / count)
    middle = paths.positions[:, 1]
    between = 0.5 * (paths.positions[:, 0] + paths.positions[:, 2])
    # The pinned prior at half a gap of length 1: variance 2 D (1/2)(1/2), 5 standard errors.
    variance = 2 * 0.4 * 0.25
    assert_allclose((middle - between).var(axis=0), variance, atol=5 * variance * np.sqrt(2 / count))


def test_density_between_snapshots_has_mass_one():
    rng = np.random.default_rng(1)
    clouds = [rng.normal(k, 1.0, n) for k, n in enumerate((20, 30))]
    series = ensembles.SnapshotSeries.from_arrays([0, 1], clouds, features={"r": clouds}).with_growth(Growth("r"))
    bridge = ensembles.fit_bridge(series, PRIOR)
    x = np.linspace(-12, 14, 4001)
    assert_allclose(np.exp(bridge.log_density(0.5, x)).sum() * (x[1] - x[0]), 1.0, rtol=1e-6)


@pytest.mark.parametrize(
    "growth", [{"rate": "net"}, {"birth": "birth", "death": 0.1, "uncertainty": 0.3, "later": 0.2}]
)
def test_files_keep_growth(tmp_path, growth):
    series = growing(**growth)
    ensembles.write_snapshots(series, tmp_path / "series.npz")
    again = ensembles.read_snapshots(tmp_path / "series.npz")
    assert again.growth == series.growth and again.fingerprint() == series.fingerprint()
    assert series.with_growth(None).fingerprint() != series.fingerprint()
    bridge = ensembles.fit_bridge(series, PRIOR)
    bridge.save(tmp_path / "bridge.npz")
    loaded = ensembles.load_bridge(tmp_path / "bridge.npz")
    assert loaded.series.growth == series.growth
    assert_allclose(loaded.coupling(1).matrix(), bridge.coupling(1).matrix(), rtol=0)
    assert ensembles.implied_growth(loaded).equals(ensembles.implied_growth(bridge))
    assert series.subset([0, 2]).growth == series.growth


def test_growth_is_in_warm_starts_and_error_bars():
    for growth in ({"rate": "net"}, {"rate": "net", "uncertainty": 0.4, "later": 0.1}):
        series = growing(**growth)
        bridge = ensembles.fit_bridge(series, PRIOR)
        again = ensembles.fit_bridge(series, PRIOR, start=bridge)
        assert again.solutions[0].iterations <= bridge.solutions[0].iterations
        assert_allclose(again.coupling(0).matrix(), bridge.coupling(0).matrix(), atol=1e-6)
    bands = ensembles.bootstrap(bridge, ensembles.Moments([1.5]), repeats=5)
    plain = ensembles.fit_bridge(series.with_growth(None), PRIOR).moments(1.5)[0][0]
    estimate = bridge.moments(1.5)[0][0]
    assert_allclose(bands.estimate[0], estimate)
    # The resamples lie about the estimate with growth, not about the one without.
    assert abs(bands.resampled[:, 0].mean() - estimate) < 0.5 * abs(plain - estimate)


def test_refusals():
    series = growing()
    cases = [
        (lambda: Growth("net", birth=1.0), "give rate, or birth and death; rate = 'net', birth = 1.0"),
        (lambda: Growth(np.nan), "growth.rate must be a number or the name of a feature; it is nan"),
        (lambda: Growth(uncertainty=-1.0), "growth.uncertainty must be a number of at least 0; it is -1.0"),
        (lambda: series.with_growth(0.5), r"growth must be a Growth; it is 0.5; write ensembles.Growth"),
        (
            lambda: series.with_growth(Growth("nett")),
            r"unknown feature of the series \(for growth\); 'nett' \(did you mean",
        ),
        (lambda: series.with_growth(Growth(1000.0)), r"growth makes the mass of a snapshot overflow; .* exp\(1000\)"),
        (
            lambda: series.with_growth(Growth(-800.0)),
            r"growth makes the mass of a snapshot vanish; .* t = 0 is multiplied",
        ),
        (lambda: series.with_growth(Growth(birth="net")), r"birth and death must not be negative; 'net'\["),
    ]
    for case, message in cases:
        with pytest.raises(ensembles.InputError, match=message):
            case()
    broken = ensembles.SnapshotSeries.from_arrays(
        [0, 1], [[0.0, 1.0], [0.0, 2.0]], features={"r": [[0.1, np.nan], [0, 0]], "t": [["a", "b"], ["a", "b"]]}
    )
    with pytest.raises(
        ensembles.InputError, match=r"growth 'r' must be finite; growth 'r'\[1\] = nan in snapshot t = 0"
    ):
        broken.with_growth(Growth("r"))
    with pytest.raises(ensembles.InputError, match="growth must be numbers; 't'.0. = 'a'"):
        broken.with_growth(Growth("t"))
    with pytest.raises(ensembles.InputError, match="growth needs ends of particles; ends are smooth"):
        ensembles.fit_bridge(growing(rate="net"), PRIOR, ends="mixture", components=1)


def test_growth_in_a_box():
    rng = np.random.default_rng(0)
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [rng.random((20, 2)), rng.random((30, 2))])
    prior = ensembles.Brownian(diffusion=0.05, box=ensembles.Box([0, 0], [1, 1], "reflecting"))
    bridge = ensembles.fit_bridge(series.with_growth(Growth(uncertainty=0.5)), prior)
    pi = bridge.coupling(0).matrix()
    assert max(np.abs(pi.sum(axis=1 - side) - bridge.gap_weights[0][side]).sum() for side in (0, 1)) < 1e-6
    with pytest.raises(
        ensembles.InputError, match="paths with growth are not available in a box; the series has growth"
    ):
        bridge.sample_paths(5, [0.0, 0.5, 1.0])
