"""The scikit-learn face: its own checks, model selection, and the same numbers as the bridge."""

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal
from sklearn.base import clone
from sklearn.model_selection import GridSearchCV, StratifiedKFold, cross_val_score
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler
from sklearn.utils.estimator_checks import estimator_checks_generator

import ensembles

CHECKS = {}
for _, _check in estimator_checks_generator(ensembles.BridgeModel()):
    CHECKS.setdefault(getattr(_check, "func", _check).__name__ + f"-{len(CHECKS)}", _check)


# scikit-learn hands over clouds of a few repeated rows; its k-means says so.
@pytest.mark.filterwarnings("ignore::sklearn.exceptions.ConvergenceWarning")
@pytest.mark.filterwarnings("ignore::sklearn.exceptions.DataConversionWarning")
@pytest.mark.parametrize("name", CHECKS)
def test_the_checks_of_scikit_learn(name):
    if "array_api" in name:
        pytest.skip("needs SCIPY_ARRAY_API")
    CHECKS[name](ensembles.BridgeModel())


@pytest.fixture(scope="module")
def rows():
    rng = np.random.default_rng(0)
    start = rng.standard_normal((120, 2))
    end = 0.4 * rng.standard_normal((120, 2)) + np.where(rng.integers(2, size=(120, 1)), [3.0, 0.0], [-3.0, 0.0])
    order = rng.permutation(240)
    return np.concatenate([start, end])[order], np.repeat([0.0, 2.0], 120)[order]


def test_it_is_the_bridge(rows):
    X, times = rows
    model = ensembles.BridgeModel(diffusion=0.4, components=2).fit(X, times)
    series = ensembles.SnapshotSeries.from_arrays([0.0, 2.0], [X[times == t] for t in (0.0, 2.0)])
    bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.4), ends="mixture", components=2)
    assert_array_equal(model.times_, [0.0, 2.0])
    for t in (0.0, 0.7, 2.0):
        assert_array_equal(model.score_samples(X, np.full(240, t)), bridge.log_density(t, X))
        assert_array_equal(model.sample(7, time=t, random_state=3), bridge.sample(t, 7, rng=3))
    assert_array_equal(model.predict(X), bridge.conditional_end(X).mean())
    assert_allclose(model.score(X, times), model.score_samples(X, times).mean())
    assert_array_equal(model.score_samples(X), bridge.log_density(2.0, X))
    assert_array_equal(model.fit(X, times=times).score_samples(X), bridge.log_density(2.0, X))


def test_an_ornstein_uhlenbeck_prior(rows):
    X, times = rows
    model = ensembles.BridgeModel(diffusion=0.4, rate=0.5, centre=1.0, components=1).fit(X, times)
    assert isinstance(model.bridge_.prior, ensembles.OrnsteinUhlenbeck)
    assert_allclose(model.bridge_.prior.drift([[3.0, 1.0]]), [[-1.0, 0.0]])


def test_parameters_and_clone():
    model = ensembles.BridgeModel(diffusion=0.4, ends=ensembles.KernelEnds(bandwidth=0.3))
    assert model.get_params()["diffusion"] == 0.4
    assert clone(model).get_params()["ends"].bandwidth == 0.3
    assert "diffusion=0.4" in repr(model)
    assert model.set_params(components=4).components == 4


def test_a_grid_search_finds_the_two_components(rows):
    X, times = rows
    folds = StratifiedKFold(3, shuffle=True, random_state=0)
    search = GridSearchCV(ensembles.BridgeModel(diffusion=0.4), {"components": [1, 2]}, cv=folds).fit(X, times)
    assert search.best_params_ == {"components": 2}
    scores = search.cv_results_["mean_test_score"]
    assert scores[1] > scores[0] + 0.3


def test_it_works_behind_a_scaler(rows):
    X, times = rows
    scores = cross_val_score(
        make_pipeline(StandardScaler(), ensembles.BridgeModel(diffusion=0.2, components=2)), X, times, cv=3
    )
    assert np.isfinite(scores).all()


def test_refusals(rows):
    X, times = rows
    with pytest.raises(ensembles.InputError, match="requires y to be passed.*time of every row"):
        ensembles.BridgeModel().fit(X)
    with pytest.raises(ensembles.InputError, match="y must be the time of every row; it holds 3 for 240 rows"):
        ensembles.BridgeModel().fit(X, [0, 1, 2])
    with pytest.raises(ensembles.InputError, match="y must be finite"):
        ensembles.BridgeModel().fit(X, np.full(240, np.nan))
    with pytest.raises(ensembles.InputError, match="y must be the time of every row; .*'early'"):
        ensembles.BridgeModel().fit(X, ["early"] * 240)
    atoms = ensembles.BridgeModel(ends="atoms").fit(X, times)
    with pytest.raises(ensembles.InputError, match="density does not exist at a snapshot"):
        atoms.score(X, times)
    assert np.isfinite(atoms.score_samples(X, times=np.full(240, 0.7))).all()
