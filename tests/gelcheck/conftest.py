"""Invented cells on known gels, their displacement with known noise: everything but the images."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pytest

from tfm.displacement.model import DisplacementField
from tfm.gel import Gel
from tfm.gelcheck import GelEvidence, check_gel
from tfm.images.model import Outlines
from tfm.moments import CellDipole, cell_dipoles
from tfm.synth import make_cell_traction
from tfm.synth.forward import displacement_at, surface_displacements
from tfm.traction import TractionField, infer_bounded

PIXEL = 0.4e-6
SHAPE = (176, 176)


@dataclass(frozen=True)
class Case:
    """A field, what was put in, and what the bounded method made of it on the entered gel."""

    true: Gel
    outlines: Outlines
    field: DisplacementField
    moment: float

    def infer(self, gel: Gel) -> tuple[TractionField, tuple[CellDipole, ...]]:
        traction = infer_bounded(self.field, PIXEL, self.outlines, gel, most_coefficients=300)
        return traction, cell_dipoles(traction, self.outlines, PIXEL)


def make_case(gel: Gel, *, seed: int = 2, noise: float = 0.015e-6, moment: float | None = None) -> Case:
    """One elongated cell in the middle of a 70 um field; ``noise`` is one standard deviation of a vector, m."""
    rng = np.random.default_rng(seed)
    pull = 0.8e-12 * gel.youngs_modulus / 6e3 if moment is None else moment
    cell = make_cell_traction(
        SHAPE, PIXEL, centre=(35e-6, 36e-6), length=30e-6, width=14e-6, angle=0.5, contractile_moment=pull, rng=rng,
        anisotropy=0.6, spacing_px=1.0,
    )  # fmt: skip
    margin = 8
    u = surface_displacements([cell.traction], cell.spacing, gel, margin=margin)[0]
    step = cell.spacing / PIXEL
    places = np.arange(2.0, SHAPE[0], 6.0)
    x, y = np.meshgrid(places, places)
    shift = displacement_at(u, -0.5 + (0.5 - margin) * step, step, np.stack([x.ravel(), y.ravel()], axis=1))
    clean = shift.T.reshape(2, places.size, places.size)
    weight = np.full(x.shape, 1.0 / noise**2)
    field = DisplacementField(
        x=places * PIXEL, y=places * PIXEL, u=clean + noise * rng.standard_normal(clean.shape) + 0.1e-6,
        precision=np.stack([weight, np.zeros_like(weight), weight]), valid=np.ones(x.shape, bool), drift=np.zeros(2),
        noise=noise, independent_area=(6 * PIXEL) ** 2, rejected=0,
    )  # fmt: skip
    return Case(gel, Outlines(cell.mask.astype(np.int32), "invented"), field, pull)


@pytest.fixture(scope="session")
def case() -> Callable[..., Case]:
    """Makes cases, each once."""
    known: dict[tuple[object, ...], Case] = {}

    def make(gel: Gel, seed: int = 2, noise: float = 0.015e-6) -> Case:
        key = (gel, seed, noise)
        if key not in known:
            known[key] = make_case(gel, seed=seed, noise=noise)
        return known[key]

    return make


@pytest.fixture(scope="session")
def checked(case) -> Callable[..., GelEvidence]:
    """The check of an entered gel on a case, each done once."""
    known: dict[tuple[object, ...], GelEvidence] = {}

    def check(gel: Gel, entered: Gel, seed: int = 2, noise: float = 0.015e-6) -> GelEvidence:
        key = (gel, entered, seed, noise)
        if key not in known:
            known[key] = check_gel(*case(gel, seed, noise).infer(entered))
        return known[key]

    return check
