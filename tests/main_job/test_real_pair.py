"""A real pair of images near rest goes through the whole job: the dipole is consistent with zero."""

from __future__ import annotations

import csv
import subprocess
import sys
from pathlib import Path

import numpy as np
import openpiv
import pytest
import tifffile

PAIRS = Path(openpiv.__file__).parent / "data" / "test5"


@pytest.mark.parametrize("number", [1, 6])
def test_near_rest_pair_has_no_dipole(tmp_path, number):
    """OpenPIV's packaged pair ``test5/Pattern_N`` (a pattern near rest, +-0.1 px), with an invented outline and gel.

    Half of the frame is used. Consistent with zero: the tensor's chi-square with three degrees of freedom stays below
    its
    99.9 % quantile, 16.3 (handbook table).
    """
    for name, part in (("relaxed", "A"), ("stressed", "B")):
        frame = tifffile.imread(PAIRS / f"Pattern_{number}_{part}.tif")
        tifffile.imwrite(tmp_path / f"{name}.tif", frame[256:768, 256:768])
    rows, columns = np.indices((512, 512))
    labels = (((rows - 250) / 60) ** 2 + ((columns - 260) / 100) ** 2 < 1).astype(np.uint8)
    tifffile.imwrite(tmp_path / "outline.tif", labels)
    (tmp_path / "sheet.csv").write_text(
        "field,stressed,relaxed,outline,pixel,youngs_modulus,poisson\n"
        "rest,stressed.tif,relaxed.tif,outline.tif,0.2 um,5 kPa,0.45\n"
    )
    command = [sys.executable, "-m", "tfm", "run", str(tmp_path / "sheet.csv"), "-o", str(tmp_path / "out")]
    done = subprocess.run(command, capture_output=True, text=True, timeout=600)
    assert done.returncode == 0, done.stderr[-2000:]
    with (tmp_path / "out" / "cells.csv").open(newline="") as stream:
        (row,) = csv.DictReader(stream)
    dipole = np.array([float(row[f"dipole_{k}_pNm"]) for k in ("xx", "xy", "yy")])
    sd = [float(row[f"dipole_{k}_sd_pNm"]) for k in ("xx", "xy", "yy")]
    off = [float(row[f"cov_{k}_pNm2"]) for k in ("xx_xy", "xx_yy", "xy_yy")]
    covariance = np.diag(np.square(sd))
    covariance[np.triu_indices(3, 1)] = off
    covariance[np.tril_indices(3, -1)] = [off[0], off[1], off[2]]
    assert dipole @ np.linalg.solve(covariance, dipole) < 16.3
