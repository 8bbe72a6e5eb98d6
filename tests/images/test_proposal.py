"""Outlines proposed from displacement, on displacement summed from point forces in real space.

Forward model: Cerruti's solution for a tangential point force on a half-space (Johnson, Contact Mechanics, 1985, sec.
3.6), u_i = (1 + nu) / (pi E r) [(1 - nu) d_ij + nu r_i r_j / r^2] F_j. The proposal works with |k| u in Fourier space.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from scipy import ndimage
from skimage.draw import ellipse

from tfm.errors import InputError, MeasurementError
from tfm.images import propose_outline

PIXEL = 0.2e-6
SHAPE = (512, 512)
X = np.arange(8, 504, 8) * PIXEL
UM = 1e-6


@dataclass(frozen=True)
class Cell:
    """An invented contracting cell: pulls at ten places of its elliptic rim towards its middle line; um and rad."""

    x: float
    y: float
    a: float
    b: float
    angle: float
    poisson: float = 0.45

    def displacement(self, force: float = 10e-9, youngs: float = 5e3) -> np.ndarray:
        gx, gy = np.meshgrid(X, X)
        u = np.zeros((2, *gx.shape))
        c, s = np.cos(self.angle), np.sin(self.angle)
        for t in 2 * np.pi * np.arange(10) / 10:
            ex, ey = self.a * np.cos(t), self.b * np.sin(t)
            px, py = (self.x + ex * c - ey * s) * UM, (self.y + ex * s + ey * c) * UM
            fx, fy = -force * np.cos(t) * c, -force * np.cos(t) * s
            for turn in 2 * np.pi * np.arange(12) / 12:  # an adhesion of 2 um
                dx, dy = gx - px - UM * np.cos(turn), gy - py - UM * np.sin(turn)
                r = np.maximum(np.hypot(dx, dy), 0.3 * UM)
                scale = (1 + self.poisson) / (np.pi * youngs * r) / 12
                along = self.poisson * (dx * fx + dy * fy) / r**2
                u[0] += scale * ((1 - self.poisson) * fx + along * dx)
                u[1] += scale * ((1 - self.poisson) * fy + along * dy)
        return u

    def mask(self) -> np.ndarray:
        mask = np.zeros(SHAPE, bool)
        px = PIXEL / UM
        mask[ellipse(self.y / px, self.x / px, self.b / px, self.a / px, shape=SHAPE, rotation=-self.angle)] = True
        return mask


ONE = (Cell(51, 51, 20, 8, 0.5),)
LONG = (Cell(51, 51, 30, 12, 0.0),)
TWO = (Cell(30, 35, 15, 7, 0.3), Cell(70, 70, 15, 7, 1.4))


@pytest.mark.parametrize("cells", [ONE, LONG, TWO], ids=["one", "long", "two"])
@pytest.mark.parametrize("relative", [0.0, 0.02, 0.1, 0.2])
def test_proposal_contains_every_cell_and_little_else(cells: tuple[Cell, ...], relative: float) -> None:
    u = sum(cell.displacement() for cell in cells)
    noise = relative * float(np.abs(u).max())
    u = u + noise * np.random.default_rng(1).standard_normal(u.shape)
    outlines = propose_outline(u, X, X, PIXEL, SHAPE, noise)
    assert len(outlines.cells) == len(cells)
    truth = np.any([cell.mask() for cell in cells], axis=0)
    for cell in cells:
        inside = outlines.labels[cell.mask()]
        assert np.unique(inside).size == 1  # all of it, under one number
        assert inside[0] > 0
    assert np.count_nonzero(outlines.labels) < 4.0 * np.count_nonzero(truth)


def test_proposal_is_marked_and_repeatable() -> None:
    u = ONE[0].displacement()
    first, second = (propose_outline(u, X, X, PIXEL, SHAPE, 1e-9) for _ in range(2))
    assert first.proposed
    assert first.source == "proposed from displacement"
    assert len(first.notes) == 1
    assert "not drawn" in first.notes[0]
    np.testing.assert_array_equal(first.labels, second.labels)


def test_gaps_in_the_displacement_are_no_obstacle() -> None:
    u = ONE[0].displacement()
    u[:, np.random.default_rng(2).random(u.shape[1:]) < 0.15] = np.nan
    u[:, 40:46, 10:16] = np.nan
    outlines = propose_outline(u, X, X, PIXEL, SHAPE, 1e-8)
    assert outlines.cells == (1,)
    assert (outlines.labels[ONE[0].mask()] == 1).all()


def test_a_drift_left_in_the_displacement_moves_nothing() -> None:
    u = ONE[0].displacement()
    shifted = u + np.array([0.3e-6, -0.2e-6])[:, None, None]
    np.testing.assert_array_equal(
        propose_outline(u, X, X, PIXEL, SHAPE, 1e-9).labels, propose_outline(shifted, X, X, PIXEL, SHAPE, 1e-9).labels
    )


@pytest.mark.parametrize("smooth", [0.0, 1.5])
def test_noise_alone_proposes_nothing(smooth: float) -> None:
    rng = np.random.default_rng(3)
    area = None
    for _ in range(25):
        u = rng.standard_normal((2, X.size, X.size))
        if smooth:  # overlapping windows: the errors of neighbours are alike
            u = np.stack([ndimage.gaussian_filter(c, smooth, mode="wrap") for c in u])
            u /= u.std()
            area = 4 * np.pi * smooth**2 * (X[1] - X[0]) ** 2
        with pytest.raises(MeasurementError) as error:
            propose_outline(1e-8 * u, X, X, PIXEL, SHAPE, 1e-8, independent_area=area)
        assert error.value.code == "no-displacement"


def test_unknown_noise_is_taken_from_the_field() -> None:
    u = ONE[0].displacement() + 2e-8 * np.random.default_rng(4).standard_normal((2, X.size, X.size))
    outlines = propose_outline(u, X, X, PIXEL, SHAPE, float("nan"))
    assert (outlines.labels[ONE[0].mask()] == 1).all()


@pytest.mark.parametrize(
    "u", [np.zeros((2, X.size, X.size)), np.full((2, X.size, X.size), 1e-6)], ids=["zero", "uniform"]
)
def test_no_displacement_is_said(u: np.ndarray) -> None:
    with pytest.raises(MeasurementError, match="no displacement rises above the noise"):
        propose_outline(u, X, X, PIXEL, SHAPE, 0.0)


def test_too_few_vectors_are_said() -> None:
    with pytest.raises(MeasurementError, match="too few displacements"):
        propose_outline(np.full((2, X.size, X.size), np.nan), X, X, PIXEL, SHAPE, 1e-9)


@pytest.mark.parametrize(
    ("u", "x"),
    [
        (np.zeros((2, 4, 4)), np.arange(4) * 1e-6),
        (np.zeros((3, 10, 10)), np.arange(10) * 1e-6),
        (np.zeros((2, 10, 10)), np.arange(10.0) ** 2 * 1e-6),
        (np.zeros((2, 10, 10)), np.zeros(10)),
    ],
)
def test_bad_grids_are_refused(u: np.ndarray, x: np.ndarray) -> None:
    with pytest.raises(InputError) as error:
        propose_outline(u, x, x, PIXEL, SHAPE, 1e-9)
    assert error.value.code == "displacement-grid"


def test_cell_cut_by_the_edge_is_called_one_sided() -> None:
    # the left half of this cell lies outside the image
    u = Cell(0, 51, 25, 8, 0.0).displacement()
    outlines = propose_outline(u, X, X, PIXEL, SHAPE, 1e-9)
    assert any("outside the image" in note for note in outlines.notes)
