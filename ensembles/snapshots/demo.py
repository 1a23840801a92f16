"""Writing an invented data set and the study file that goes with it."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from .. import checks, writing
from .demo_beads import beads
from .demo_cells import cells

__all__ = ["DEMOS", "write_demo"]

DEMOS: dict[str, Callable[[np.random.Generator], dict[str, np.ndarray]]] = {"beads": beads, "cells": cells}

_BEADS = """\
# Tracer beads in a shallow channel with a weak trap: three films, 6 s apart. Invented data.
# Solve it:  ensembles solve study.toml --out result

[study]
title = "Beads in a shallow channel"
seed = 0                          # of every random number: the same seed gives the same result

[data]
file = "beads.csv"                # beside this file; also .tsv, .parquet, .npz
time = "t_s"                      # the column that says which snapshot a row belongs to
position = ["x_um", "y_um"]       # one column a coordinate
# weight = "mass"                 # optional: a weight for each row
# label = "kind"                  # optional: a class for each row
# features = ["brightness"]       # optional: further columns to carry along

[units]                           # words for tables and axes; nothing is converted
time = "s"
length = "µm"

[prior]                           # what a bead does when nothing else is known
kind = "ornstein-uhlenbeck"       # dX = -rate (X - centre) dt + sqrt(2 diffusion) dW; or "brownian"
diffusion = 0.43                  # µm²/s: a sphere of 1 µm in water at 20 °C; a number, one an axis, or a matrix
rate = [0.08, 0.25]               # 1/s: the trap's pull along and across the channel; a number or matrix will do
centre = [0.0, 0.0]               # µm
# drift = [0.1, 0.0]              # µm/s: of kind "brownian" only

[solve]
tolerance = 1e-6                  # L1 error of the marginals
# sweeps = 1000                   # largest number of sweeps; left out: the solver decides

[output]
paths = 200                       # sampled paths
path_times = 41                   # times along each
intermediate = 5                  # clouds and densities between the first and the last snapshot
format = "csv"                    # of paths: "csv" or "parquet"
links = 3                         # most probable partners listed for each particle
"""

_CELLS = """\
# A fin ray that grows back: progenitors branch into sheath and core. Four days, eight components. Invented data.
# Solve it:  ensembles solve study.toml --out result

[study]
title = "A fin ray grows back"
seed = 0                          # of every random number: the same seed gives the same result

[data]
file = "cells.csv"                # beside this file; also .tsv, .parquet, .npz
time = "day"                      # the column that says which snapshot a row belongs to
position = ["C1", "C2", "C3", "C4", "C5", "C6", "C7", "C8"]
label = "type"                    # a class for each row
features = ["marker_sheath", "marker_core"]   # further columns to carry along

[units]                           # words for tables and axes; nothing is converted
time = "d"
length = ""                       # components have no unit

# [scaling]                       # of the coordinates before the fit; the prior is then in scaled units, tables are not
# kind = "pca"                    # or "none", "standardise", "whiten"
# components = 5
# [growth]                        # birth and death; left out: none
# rate = 0.0                      # net growth rate per day: a number, or the name of a feature column
# uncertainty = 0.2               # how far a cell's rate may be from that; 0 takes it as exact
# estimate = true                 # find the rates, as one smooth function of state, from the snapshots themselves
# later = 0.5                     # by how much a later cell's weight may change (logarithm); sheds what has no origin

[prior]                           # what a cell does when nothing else is known
kind = "brownian"                 # dX = drift dt + sqrt(2 diffusion) dW
diffusion = 0.1                   # per day: `ensembles look study.toml` says whether it is of the right order

[solve]
tolerance = 1e-6                  # L1 error of the marginals

[output]
paths = 200                       # sampled paths
path_times = 36                   # times along each
intermediate = 5                  # clouds and densities between the first and the last snapshot
format = "csv"                    # of paths: "csv" or "parquet"
links = 3                         # most probable partners listed for each cell
repeats = 20                      # resamples for the standard errors of lineages; 0 for none
"""

_STUDIES = {"beads": _BEADS, "cells": _CELLS}


def write_demo(name: str, folder: str | os.PathLike[str], *, rng: Any = 0, force: bool = False) -> list[Path]:
    """Write the invented data set `name` and its study file into a folder.

    Parameters
    ----------
    name : "beads" or "cells".
    folder : made if it does not exist; must be empty unless `force`.
    rng : int or numpy Generator.
    force : replace the two files in a folder that holds something; nothing else in it is touched.

    Returns
    -------
    list of the paths written: the data, the study file.

    Raises
    ------
    InputError
        If there is no such data set, or the folder holds something and `force` is not set.

    Examples
    --------
    >>> import tempfile
    >>> [path.name for path in write_demo("beads", tempfile.mkdtemp())]
    ['beads.csv', 'study.toml']
    """
    if name not in DEMOS:
        raise checks.unknown_name("demonstration", name, list(DEMOS))
    generator = checks.generator(rng)
    target = Path(folder)
    if target.exists() and not target.is_dir():
        raise checks.InputError(f"the folder for the data is a file; {str(folder)!r}; choose another name")
    if target.is_dir() and any(target.iterdir()) and not force:
        raise checks.InputError(
            f"the folder for the data is not empty; {str(folder)!r}; choose another one, or add --force to replace "
            f"{name}.csv and study.toml in it"
        )
    columns = DEMOS[name](generator)
    target.mkdir(parents=True, exist_ok=True)
    data, study = target / f"{name}.csv", target / "study.toml"
    writing.write_text(data, _as_csv(columns))
    writing.write_text(study, _STUDIES[name])
    return [data, study]


def _as_csv(columns: dict[str, np.ndarray]) -> str:
    """Text with one row a particle: times as they are, other numbers to the four decimals an instrument would give."""
    time = next(iter(columns))
    texts = [
        [f"{value:.4f}" if column.dtype.kind == "f" and name != time else str(value) for value in column]
        for name, column in columns.items()
    ]
    return "\n".join([",".join(columns), *(",".join(row) for row in zip(*texts))]) + "\n"
