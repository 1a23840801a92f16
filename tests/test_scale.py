"""Problems of the size that users bring: the certificate is met, and memory does not grow with n times m."""

import json
import subprocess
import sys

import numpy as np

import ensembles

# Run in a process of its own: peak memory belongs to a whole process and never falls. On Linux a process begins with
# the peak of the one that started it, so a small process stands between it and the tests.
BETWEEN = "import subprocess, sys; sys.exit(subprocess.call(sys.argv[1:]))"
STREAMED = """
import json, resource, sys
import numpy as np
import ensembles

n = int(sys.argv[1])
rng = np.random.default_rng(2)
clouds = [rng.normal(size=(n, 2)), rng.normal([2.0, 1.0], 1.5, size=(n, 2))]
series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], clouds)
bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.25), tolerance=1e-6)
links = bridge.coupling(0).top_links(1)
drift = bridge.drift(0.5, clouds[0])
print(json.dumps({
    "peak": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss,
    "converged": bridge.converged,
    "error": bridge.solutions[0].certificate.marginal_error,
    "kernel": type(bridge.coupling(0).kernel).__name__,
    "links": len(links),
    "finite": bool(np.isfinite(drift).all()),
}))
"""


def run_streamed(n: int) -> dict:
    command = [sys.executable, "-c", BETWEEN, sys.executable, "-c", STREAMED, str(n)]
    finished = subprocess.run(command, capture_output=True, text=True, check=False)
    assert finished.returncode == 0, finished.stderr
    result = json.loads(finished.stdout)
    # ru_maxrss counts KiB on Linux and bytes on macOS (getrusage(2) of each).
    result["peak"] *= 1 if sys.platform == "darwin" else 1024
    print(f"{n} x {n}: peak memory {result['peak'] / 1e6:.0f} MB, L1 error {result['error']:.2g}")
    return result


def test_a_thousand_by_a_thousand_meets_its_tolerance():
    rng = np.random.default_rng(1)
    clouds = [rng.normal(size=(1000, 2)), rng.normal([2.0, 1.0], 1.5, size=(1000, 2))]
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], clouds)
    bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.05), tolerance=1e-6)
    assert bridge.converged
    assert bridge.solutions[0].certificate.marginal_error <= 1e-6
    # The certificate's word, against the whole matrix.
    coupling = bridge.coupling(0).matrix()
    assert np.abs(coupling.sum(axis=1) - 1e-3).sum() <= 1.001e-6
    assert np.abs(coupling.sum(axis=0) - 1e-3).sum() <= 1.001e-6


def test_twenty_thousand_by_twenty_thousand_stay_below_a_gigabyte():
    small, large = run_streamed(500), run_streamed(20_000)
    assert large["converged"]
    assert large["error"] <= 1e-6
    assert large["links"] == 20_000
    assert large["finite"]
    # The matrix alone would be 3.2 GB.
    assert large["peak"] < 1e9
    # Libraries and compiled code are most of it, and what the start from clouds of 5,000 stores (four bytes a pair, whatever
    # the size of the problem); 1600 times as many pairs add less than a fiftieth of the matrix beside that.
    assert large["peak"] - small["peak"] < 5_000**2 * 4 + 20_000**2 * 8 / 50
