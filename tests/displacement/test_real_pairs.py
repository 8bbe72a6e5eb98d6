"""OpenPIV's own sample pairs, read from the installed package (never copied): real images, real noise."""

from __future__ import annotations

from importlib.resources import files

import numpy as np
import pytest
from scipy.interpolate import RegularGridInterpolator
from skimage.io import imread
from skimage.registration import phase_cross_correlation

from tfm.displacement import measure_displacement
from tfm.displacement.piv import piv_start
from tfm.displacement.prepare import prepare_frame

DATA = files("openpiv") / "data"


def load(*names: str) -> list[np.ndarray]:
    images = [np.asarray(imread(str(DATA / name)), dtype=np.float32) for name in names]
    return [image.mean(axis=-1) if image.ndim == 3 else image for image in images]


def test_reference_vectors_of_test1() -> None:
    """``data/test1``: a flow of about 5 px with the vector file that OpenPIV ships (32 px windows)."""
    a, b = load("test1/exp1_001_a.bmp", "test1/exp1_001_b.bmp")
    table = np.loadtxt(str(DATA / "test1" / "test_data.vec"), comments="#")
    # The file is in mm at 96.52 px/mm (OpenPIV's tutorial), y upwards.
    x, y, u, v = table[:, :4].T * 96.52
    y, v = a.shape[0] - y, -v
    found = piv_start(prepare_frame(a).image, prepare_frame(b).image)
    known = np.where(found.valid, found.u, np.nan)
    at = np.stack([y, x], axis=1)
    ours = [RegularGridInterpolator((found.y, found.x), part, bounds_error=False)(at) for part in known]
    distance = np.hypot(ours[0] - u, ours[1] - v)
    assert np.isfinite(distance).mean() > 0.5
    assert np.nanmedian(np.hypot(u, v)) > 4
    assert np.nanmedian(distance) < 0.3


@pytest.mark.parametrize("number", [1, 4, 7])
def test_noise_floor_of_near_rest_pairs(number: int) -> None:
    """``data/test5``: patterns near rest, within 0.1 px; the mean agrees with scikit-image's phase correlation."""
    a, b = load(f"test5/Pattern_{number}_A.tif", f"test5/Pattern_{number}_B.tif")
    a, b = a[:400, :400], b[:400, :400]
    field = measure_displacement(a, b, 1.0)
    outside = -phase_cross_correlation(a, b, upsample_factor=100, normalization=None)[0][::-1]
    assert np.abs(field.drift - outside).max() < 0.05
    assert field.valid.mean() > 0.8
    assert 0 < field.noise < 0.06


def test_bead_like_pair_test4_comes_back() -> None:
    """``data/test4``: 2304 x 1720 px, bead-like, within 2 px; a corner of it here."""
    a, b = load("test4/Camera1-0101.tif", "test4/Camera1-0102.tif")
    a, b = a[600:1000, 600:1000], b[600:1000, 600:1000]
    field = measure_displacement(a, b, 1.0)
    assert field.valid.mean() > 0.8
    total = field.u + field.drift[:, None, None]
    assert np.nanquantile(np.hypot(*total), 0.95) < 4
