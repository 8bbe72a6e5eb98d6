"""Invented bead pairs with known displacement, and OpenPIV's own passes to compare with."""

from __future__ import annotations

import contextlib
import io
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from tfm.displacement import DisplacementField
from tfm.synth import Beads, Camera, expected_photons, make_bead_images, make_beads

Array = NDArray[Any]
Motion = Callable[[Array, Array], Array]


@dataclass(frozen=True)
class Pair:
    relaxed: Array
    stressed: Array
    variance: Array
    motion: Motion
    beads: Beads
    sigma: float
    size: int

    def error(self, field: DisplacementField) -> Array:
        """Error in px of every vector of a field that was measured with pixel size 1."""
        return np.asarray(field.u - self.motion(*np.meshgrid(field.x, field.y)))

    def surprise(self, field: DisplacementField) -> Array:
        """Squared error over quoted variance, mean of the two components; 1 on average when the precision is true."""
        p, e = field.precision, self.error(field)
        return np.asarray((p[0] * e[0] ** 2 + 2 * p[1] * e[0] * e[1] + p[2] * e[1] ** 2) / 2)

    def radius(self, field: DisplacementField) -> Array:
        x, y = np.meshgrid(field.x, field.y)
        return np.asarray(np.hypot(x - self.size / 2, y - self.size / 2))

    def gradients(self) -> tuple[Array, Array]:
        """Exact derivative of the noise-free relaxed image, from beads moved by 0.01 px."""
        out = []
        for step in (np.array([0.01, 0.0]), np.array([0.0, 0.01])):
            places = [self.beads.positions - s * step for s in (1, -1)]
            ends = [expected_photons((self.size,) * 2, p, self.beads.photons, self.sigma) for p in places]
            out.append((ends[0] - ends[1]) / 0.02)
        return out[0], out[1]


def bump(size: int, peak: float = 4.0, width: float = 25.0) -> Motion:
    """A smooth hill of displacement in the middle of the picture, nothing at its rim."""

    def motion(x: Array, y: Array) -> Array:
        hill = peak * np.exp(-((x - size / 2) ** 2 + (y - size / 2) ** 2) / (2 * width**2))
        return np.stack([hill, -0.5 * hill])

    return motion


@pytest.fixture(name="bump")
def _bump() -> Callable[..., Motion]:
    return bump


@pytest.fixture
def make_pair() -> Callable[..., Pair]:
    def make(
        motion: Motion | None = None,
        *,
        size: int = 320,
        seed: int = 0,
        density: float = 0.02,
        photons: float = 500.0,
        camera: Camera | None = None,
        sigma: float = 1.25,
        keep: Callable[[Array], Array] | None = None,
        **imperfections: Any,
    ) -> Pair:
        rng = np.random.default_rng(seed)
        beads = make_beads((size, size), density, rng, margin=30.0, photons=photons)
        if keep is not None:
            some = keep(beads.positions)
            beads = Beads(beads.positions[some], beads.photons[some])
        motion = motion or bump(size)
        shifts = motion(beads.positions[:, 0], beads.positions[:, 1]).T
        relaxed, stressed, va, vb = make_bead_images(
            (size, size), beads, shifts, rng, sigma=sigma, camera=camera or Camera(), **imperfections
        )
        return Pair(relaxed, stressed, va + vb, motion, beads, sigma, size)

    return make


@pytest.fixture
def quiet() -> Array:
    """Ground further than 80 px from the middle of 320 x 320 px."""
    x, y = np.meshgrid(np.arange(320), np.arange(320))
    return np.asarray(np.hypot(x - 160, y - 160) > 80)


@pytest.fixture
def openpiv_windef() -> Callable[..., tuple[Array, Array, Array]]:
    """OpenPIV's own three passes of window deformation: x, y (px, centres) and u (px, y down)."""

    def passes(relaxed: Array, stressed: Array, step: int = 8) -> tuple[Array, Array, Array]:
        from openpiv import filters, validation, windef
        from openpiv.settings import PIVSettings

        settings = PIVSettings()
        settings.windowsizes, settings.overlap, settings.num_iterations = (64, 32, 32), (32, 16, 32 - step), 3
        settings.use_vectorized, settings.sig2noise_method, settings.sig2noise_validate = False, None, False
        a, b = relaxed.astype(float), stressed.astype(float)
        with contextlib.redirect_stdout(io.StringIO()), warnings.catch_warnings():
            warnings.simplefilter("ignore")
            x, y, u, v, s2n = windef.first_pass(a, b, settings)
            u, v = (np.ma.array(part, mask=np.zeros(part.shape, bool)) for part in (u, v))
            flags = validation.typical_validation(u, v, s2n, settings)
            u, v = filters.replace_outliers(u, v, flags)
            for k in (1, 2):
                x, y, u, v, _, _ = windef.multipass_img_deform(a, b, k, x, y, u, v, settings)
        # Windows of an even number of pixels are centred half a pixel before OpenPIV's coordinates.
        return x[0] - 0.5, y[:, 0] - 0.5, np.stack([np.ma.filled(u, np.nan), np.ma.filled(v, np.nan)])

    return passes
