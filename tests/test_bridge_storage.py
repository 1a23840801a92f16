"""A bridge on disk: the same bridge again, and a clear message for every file that is none."""

import json
import pickle
import zipfile

import numpy as np
import pytest
from generators import random_clouds
from numpy.testing import assert_array_equal

import ensembles
from ensembles.bridges.fit import SolverOptions
from ensembles.bridges.storage import _digest, load_bridge


@pytest.fixture(scope="module")
def bridge():
    """A bridge through three snapshots with weights, labels, features and units."""
    one, two = random_clouds(1, 5, 6, 2, 0.3), random_clouds(2, 4, 4, 2, 0.3)
    clouds = [one.x, one.y, two.x]
    series = ensembles.SnapshotSeries.from_arrays(
        [0.0, 1.5, 2.0],
        clouds,
        [one.a, one.b, None],
        labels=[[f"Zellë {i}" if i else "" for i in range(len(cloud))] for cloud in clouds],
        features={
            "depth": [np.arange(len(cloud)) + 0.5 for cloud in clouds],
            "batch": [["a" if i % 2 else "bb" for i in range(len(cloud))] for cloud in clouds],
        },
        units={"time": "h", "length": "µm"},
        position_names=["left", "up"],
    )
    prior = ensembles.OrnsteinUhlenbeck(rate=[[0.5, 1.0], [-1.0, 0.2]], centre=[0.1, 0.2], diffusion=0.7)
    return ensembles.fit_bridge(series, prior, tolerance=1e-10)


@pytest.fixture
def saved(bridge, tmp_path):
    """The bridge, saved."""
    path = tmp_path / "bridge.npz"
    bridge.save(path)
    return path


def test_the_bridge_comes_back_bit_by_bit(bridge, saved):
    again = ensembles.load_bridge(saved)
    assert again.series.fingerprint() == bridge.series.fingerprint()
    assert repr(again) == repr(bridge) and repr(again.prior) == repr(bridge.prior)
    assert again.tolerance == bridge.tolerance and again.converged
    for name in ("position_names", "time_name", "time_unit", "length_unit"):
        assert getattr(again.series, name) == getattr(bridge.series, name)
    for k in range(3):
        assert_array_equal(again.series.labels[k], bridge.series.labels[k])
        assert_array_equal(again.series.rows[k], bridge.series.rows[k])
        for name in ("depth", "batch"):
            assert_array_equal(again.series.features[name][k], bridge.series.features[name][k])
    for one, other in zip(again.solutions, bridge.solutions, strict=True):
        assert one.certificate == other.certificate
        assert (one.outcome, one.iterations, one.unreachable) == (other.outcome, other.iterations, other.unreachable)
        assert_array_equal(one.history, other.history)
    x = bridge.series.clouds[0]
    assert_array_equal(again.log_density(0.7, x), bridge.log_density(0.7, x))
    assert_array_equal(again.drift(1.7, x), bridge.drift(1.7, x))
    one, other = again.sample_paths(9, [0.3, 2.0], rng=1), bridge.sample_paths(9, [0.3, 2.0], rng=1)
    assert_array_equal(one.positions, other.positions)
    assert_array_equal(one.members, other.members)
    warm = ensembles.fit_bridge(again.series, again.prior, tolerance=1e-9, start=again)
    assert [solution.iterations for solution in warm.solutions] == [1, 1]


def test_saving_leaves_one_whole_file_that_holds_no_pickle(bridge, saved):
    assert [path.name for path in saved.parent.iterdir()] == ["bridge.npz"]
    with np.load(saved, allow_pickle=False) as archive:
        assert all(archive[name].dtype != object for name in archive.files)
    bridge.save(saved)  # again, over it
    assert load_bridge(saved).converged
    with pytest.raises(ensembles.InputError, match=r"saved as \.npz; the name is 'bridge\.dat'"):
        bridge.save(saved.with_name("bridge.dat"))
    with pytest.raises(ensembles.InputError, match="missing"):
        bridge.save(saved.parent / "missing" / "bridge.npz")


def test_a_bridge_that_missed_its_tolerance_is_known_as_such(tmp_path):
    problem = random_clouds(3, 30, 30, 2, 0.001)
    with pytest.warns(RuntimeWarning, match="did not converge between t = 0 and t = 1; iteration limit"):
        bridge = ensembles.fit_bridge(
            problem.series(),
            ensembles.Brownian(diffusion=problem.epsilon / 2),
            options=SolverOptions(sweep_limit=2, allow_unconverged=True),
        )
    bridge.save(tmp_path / "b.npz")
    again = load_bridge(tmp_path / "b.npz")
    assert not again.converged
    assert "iteration limit" in repr(again) and "iteration limit" in again._repr_html_()


def rewritten(path, change):
    """The file again with its header changed, checksum included."""
    with np.load(path) as archive:
        arrays = {name: archive[name] for name in archive.files if name != "digest"}
    header = json.loads(str(arrays["header"]))
    change(header)
    arrays["header"] = np.array(json.dumps(header))
    np.savez(path, **arrays, digest=np.array(_digest(arrays)))


def test_a_newer_version_is_refused(saved):
    rewritten(saved, lambda header: header.update(version=99))
    with pytest.raises(ensembles.InputError, match="newer than this package; its version is 99, .* update ensembles"):
        load_bridge(saved)


def test_an_unknown_prior_is_refused(saved):
    rewritten(saved, lambda header: header["prior"].update(kind="brownain"))
    with pytest.raises(ensembles.InputError, match=r"unknown prior; 'brownain' \(did you mean 'brownian'\?\)"):
        load_bridge(saved)


def test_a_missing_file(tmp_path):
    with pytest.raises(ensembles.InputError, match=r"no such file; .*nothing\.npz.*; give the \.npz"):
        load_bridge(tmp_path / "nothing.npz")


@pytest.mark.parametrize("kept", [0, 3, 200, 0.5, 0.99])
def test_a_truncated_file(saved, kept):
    whole = saved.read_bytes()
    saved.write_bytes(whole[: kept if isinstance(kept, int) else int(kept * len(whole))])
    with pytest.raises(ensembles.InputError, match="truncated, damaged or of another kind"):
        load_bridge(saved)


def test_one_flipped_byte_anywhere_is_noticed(saved):
    whole = saved.read_bytes()
    directory = whole.index(b"PK\x01\x02")  # every byte of one entry of the archive's directory, and some of all others
    for place in [*range(50, len(whole), len(whole) // 60), *range(directory, directory + 60)]:
        broken = bytearray(whole)
        broken[place] ^= 0x01
        saved.write_bytes(bytes(broken))
        try:
            again = load_bridge(saved)
        except ensembles.InputError as error:
            assert "damaged" in str(error) or "not a bridge" in str(error)
        else:  # a byte of the archive's own book-keeping that nothing reads, such as a file date
            assert again.converged


def test_a_changed_array_is_noticed(saved):
    with np.load(saved) as archive:
        arrays = {name: archive[name] for name in archive.files}
    arrays["log_f_0"] = arrays["log_f_0"] + 1e-9
    np.savez(saved, **arrays)
    with pytest.raises(ensembles.InputError, match="checksum of .* does not match"):
        load_bridge(saved)
    del arrays["digest"]
    np.savez(saved, **arrays)
    with pytest.raises(ensembles.InputError, match="checksum of .* does not match"):
        load_bridge(saved)


def test_foreign_files_are_refused(tmp_path):
    path = tmp_path / "foreign.npz"
    np.savez(path, times=np.arange(3), clouds=np.ones((3, 2)))
    with pytest.raises(ensembles.InputError, match="not a bridge; .* holds clouds, times; give"):
        load_bridge(path)
    np.savez(path, header=np.array('{"format": "something-else", "version": 1}'))
    with pytest.raises(ensembles.InputError, match="not a bridge; .* holds header"):
        load_bridge(path)
    np.savez(path, header=np.array("[1, 2"))
    with pytest.raises(ensembles.InputError, match="not a bridge"):
        load_bridge(path)
    with zipfile.ZipFile(path, "w") as archive:
        archive.writestr("letter.txt", "hello")
    with pytest.raises(ensembles.InputError, match="not a bridge"):
        load_bridge(path)
    with open(path, "wb") as stream:
        np.save(stream, np.arange(4))
    with pytest.raises(ensembles.InputError, match="truncated, damaged or of another kind"):
        load_bridge(path)


def test_nothing_is_ever_unpickled(tmp_path):
    path = tmp_path / "pickled.npz"
    np.savez(path, header=np.array([{"format": "ensembles-bridge"}], dtype=object))
    with pytest.raises(ensembles.InputError, match="truncated, damaged or of another kind"):
        load_bridge(path)
    path.write_bytes(pickle.dumps({"format": "ensembles-bridge"}))
    with pytest.raises(ensembles.InputError, match="truncated, damaged or of another kind"):
        load_bridge(path)
