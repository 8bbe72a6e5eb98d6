"""The forward model against conservation laws, photon statistics and general-purpose libraries."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import scipy.ndimage
import scipy.signal
from skimage.registration import phase_cross_correlation

from tfm.errors import InputError
from tfm.gel import Gel
from tfm.synth import (
    Beads,
    Camera,
    cell_displacements,
    displacement_at,
    expected_photons,
    lattice_axis,
    lattice_work,
    make_bead_images,
    make_beads,
    make_cell_traction,
    make_field,
    make_outline,
    random_field,
)

GEL = Gel(6e3, 0.45)
PIXEL = 0.2e-6
SHAPE = (160, 176)


def a_cell(seed=1, spacing_px=1.0, centre=(17e-6, 15e-6), length=20e-6, moment=0.2e-12, **options):
    return make_cell_traction(
        SHAPE, PIXEL, centre=centre, length=length, width=0.5 * length, angle=0.4, contractile_moment=moment,
        rng=np.random.default_rng(seed), spacing_px=spacing_px, **options,
    )  # fmt: skip


@pytest.mark.parametrize("kind", ["elongated", "spiky", "kidney"])
def test_a_cell_balances_and_has_the_moment_asked_for(kind):
    cell = a_cell(kind=kind, polarity=0.5)
    y, x = np.mgrid[: SHAPE[0], : SHAPE[1]] * PIXEL
    area = PIXEL**2
    pull = np.abs(cell.traction).sum() * area
    assert abs(cell.traction[0].sum() * area) < 1e-12 * pull
    assert abs(cell.traction[1].sum() * area) < 1e-12 * pull
    # Torque and moment about the corner: for a balanced cell they are the same about any point.
    assert abs((x * cell.traction[1] - y * cell.traction[0]).sum() * area) < 1e-12 * pull * SHAPE[1] * PIXEL
    moment = -(x * cell.traction[0] + y * cell.traction[1]).sum() * area
    assert moment == pytest.approx(0.2e-12, rel=1e-9)
    assert cell.contractile_moment == pytest.approx(moment, rel=1e-9)
    assert not cell.traction[:, ~cell.mask].any()


def test_a_cell_is_adherent_near_its_rim_and_pulls_inwards():
    cell = a_cell(length=26e-6)
    depth = scipy.ndimage.distance_transform_edt(cell.mask) * PIXEL
    strength = np.hypot(*cell.traction)
    assert (strength * depth).sum() / strength.sum() < 0.5 * depth.max()
    y, x = np.mgrid[: SHAPE[0], : SHAPE[1]] * PIXEL
    inward = -(x - cell.centroid[0]) * cell.traction[0] - (y - cell.centroid[1]) * cell.traction[1]
    assert (inward > 0).sum() > 0.8 * (strength > 0).sum()


def test_anisotropy_one_pulls_along_the_long_axis_only():
    def across(anisotropy):
        dipole = np.mean([a_cell(seed, anisotropy=anisotropy, kind="elongated").dipole for seed in range(6)], axis=0)
        values = np.sort(np.abs(np.linalg.eigvalsh([[dipole[0], dipole[1]], [dipole[1], dipole[2]]])))
        return values[0] / values[1]

    # The outline is twice as long as wide, so that even equal pulls give a dipole along it.
    assert across(1.0) < 0.03 < 0.08 < across(0.0)


def refined(cell, times):
    """The same bilinear traction written down on a finer lattice: same forces, another quadrature."""
    rows, columns = ((np.arange(n * times) + 0.5) / times - 0.5 for n in cell.traction.shape[1:])
    places = np.meshgrid(rows, columns, indexing="ij")
    traction = np.stack([scipy.ndimage.map_coordinates(part, places, order=1) for part in cell.traction])
    return replace(cell, traction=traction, spacing=cell.spacing / times)


def test_the_displacement_at_beads_does_not_depend_on_the_lattice():
    coarse = a_cell()
    places = np.random.default_rng(0).uniform(0, 150, (4000, 2))
    first = displacement_at(cell_displacements([coarse], GEL)[0] / PIXEL, -16.0, 1.0, places)
    # Three: then every node of the coarse lattice is a node of the fine one and both are the same function.
    fine = displacement_at(cell_displacements([refined(coarse, 3)], GEL)[0] / PIXEL, -16 - 1 / 3, 1 / 3, places)
    assert np.hypot(*first.T).max() > 0.8
    assert np.abs(first - fine).max() < 1e-3
    assert np.sqrt(((first - fine) ** 2).mean()) < 1e-4


def test_far_from_a_cell_the_displacement_is_that_of_a_force_dipole():
    # Reciprocal theorem and Taylor expansion: a balanced cell seen from far moves the surface like
    # u_i = -P_jk d_k G_ij with Cerruti's half-space solution (Landau & Lifshitz sec. 8; Johnson 1985 ch. 3).
    shape = (16, 1400)
    cell = make_cell_traction((160, 1400), PIXEL, centre=(15e-6, 15e-6), length=20e-6, width=10e-6, angle=0.2,
                              contractile_moment=1e-12, rng=np.random.default_rng(3))  # fmt: skip
    u = cell_displacements([cell], GEL, margin_px=0)[0]
    e, nu = GEL.youngs_modulus, GEL.poisson
    pxx, pxy, pyy = cell.dipole

    def green(rx, ry):
        r = np.hypot(rx, ry)
        matrix = (1 - nu) * np.eye(2) + nu * np.array([[rx * rx, rx * ry], [rx * ry, ry * ry]]) / r**2
        return (1 + nu) / (np.pi * e * r) * matrix

    row, column = 75, shape[1] - 5
    rx, ry, d = column * PIXEL - cell.centroid[0], row * PIXEL - cell.centroid[1], 1e-7
    by_x = (green(rx + d, ry) - green(rx - d, ry)) / (2 * d)
    by_y = (green(rx, ry + d) - green(rx, ry - d)) / (2 * d)
    expected = -(by_x @ np.array([pxx, pxy]) + by_y @ np.array([pxy, pyy]))
    assert np.allclose(u[:, row, column], expected, rtol=0.03, atol=0.03 * np.abs(expected).max())


def test_energy_of_a_pair_is_the_same_from_either_side_and_belongs_to_the_whole():
    cells = [a_cell(2, centre=(9e-6, 16e-6), length=12e-6), a_cell(3, centre=(25e-6, 16e-6), length=12e-6)]
    both = make_field(cells, GEL, np.random.default_rng(0))
    swapped = make_field(cells[::-1], GEL, np.random.default_rng(0))
    alone = [make_field([c], GEL, np.random.default_rng(0)).strain_energies[0] for c in cells]
    assert both.pair_energies[1, 2] == pytest.approx(swapped.pair_energies[1, 2], rel=1e-4)
    # Stored energy of both = alone + alone + W (superposition).
    assert both.strain_energies.sum() == pytest.approx(sum(alone) + both.pair_energies[1, 2], rel=1e-9)
    assert all(energy > 0 for energy in both.strain_energies)


def test_the_work_of_a_bilinear_traction_is_its_exact_integral():
    # One node of 3 Pa: a pyramid over four squares of edge d. Integrals of x^2 and y^2 times the pyramid by hand:
    # d^2 (x_i^2 + d^2 / 6), because a triangle of half-width d has variance d^2 / 6.
    d = 0.5
    traction, u = np.zeros((2, 9, 9)), np.zeros((2, 9, 9))
    traction[0, 4, 5] = traction[1, 4, 5] = 3.0
    y, x = np.mgrid[:9, :9] * d
    u[0], u[1] = x**2, y**2
    by_hand = 3.0 * d**2 * (2.5**2 + d**2 / 6) + 3.0 * d**2 * (2.0**2 + d**2 / 6)
    assert lattice_work(traction, u, d) == pytest.approx(by_hand, rel=1e-12)


def test_strain_energy_does_not_depend_on_the_lattice():
    coarse = a_cell()
    one = make_field([coarse], GEL, np.random.default_rng(0)).strain_energies[0]
    two = make_field([refined(coarse, 3)], GEL, np.random.default_rng(0)).strain_energies[0]
    assert one == pytest.approx(two, rel=1e-4)


def test_a_bead_sits_where_it_was_put_with_the_photons_it_was_given():
    image = expected_photons((41, 51), np.array([[24.37, 19.81]]), np.array([700.0]), 1.3)
    row, column = scipy.ndimage.center_of_mass(image)
    assert (column, row) == pytest.approx((24.37, 19.81), abs=1e-5)
    _, x = np.mgrid[:41, :51]
    # Integration over a pixel adds 1/12 to the variance of the Gaussian.
    spread = (image * (x - column) ** 2).sum() / image.sum()
    assert spread == pytest.approx(1.3**2 + 1 / 12, rel=1e-4)
    assert image.sum() == pytest.approx(700, rel=1e-5)
    assert image[0, 0] >= 0


def test_counts_have_the_mean_and_the_variance_that_are_promised():
    rng = np.random.default_rng(5)
    beads = make_beads((128, 128), 0.02, rng, photons=400)
    camera = Camera(gain=2.0, offset=150.0, read_noise=2.0, background=8.0)
    frames = [
        make_bead_images((128, 128), beads, np.zeros_like(beads.positions), rng, camera=camera) for _ in range(60)
    ]
    relaxed = np.stack([f[0] for f in frames]).astype(float)
    light = expected_photons((128, 128), beads.positions, beads.photons, 1.25) + 8.0
    assert (relaxed.mean(axis=0) - (2 * light + 150)).mean() == pytest.approx(0, abs=0.15)
    assert (relaxed.var(axis=0, ddof=1) / frames[0][2]).mean() == pytest.approx(1, abs=0.01)
    # The two frames share beads and not noise.
    stressed = np.stack([f[1] for f in frames]).astype(float)
    noise = (relaxed - relaxed.mean(axis=0)) * (stressed - stressed.mean(axis=0))
    assert abs(noise.mean()) < 0.01 * frames[0][2].mean()


def test_drift_moves_the_stressed_frame_to_plus_x_and_plus_y():
    made = make_field([], GEL, np.random.default_rng(2), shape_px=(384, 384), pixel_size=PIXEL, drift=(2.4, -1.3),
                      photons=5000.0)  # fmt: skip
    # skimage returns the shift (row, column) that brings the second image onto the first.
    shift, _, _ = phase_cross_correlation(made.relaxed.astype(float), made.stressed.astype(float), upsample_factor=50,
                                        normalization=None)  # fmt: skip
    assert shift[::-1] == pytest.approx((-2.4, 1.3), abs=0.03)


def test_rotation_turns_from_plus_x_towards_plus_y():
    beads = Beads(np.array([[90.0, 50.0]]), np.array([1e5]))
    images = make_bead_images((101, 101), beads, np.zeros((1, 2)), np.random.default_rng(0), rotation=np.pi / 2)
    row, column = scipy.ndimage.center_of_mass(np.clip(images[1].astype(float) - 150, 0, None))
    assert (column, row) == pytest.approx((50, 90), abs=0.05)


def _difference(**imperfection):
    rng = np.random.default_rng(7)
    beads = make_beads((96, 96), 0.02, rng, margin=0, photons=600)
    return make_bead_images((96, 96), beads, np.zeros_like(beads.positions), rng, **imperfection)


def test_every_imperfection_does_what_it_says():
    plain = _difference()
    background = 100 + 10
    light = [float(frame.astype(float).sum() - background * 96**2) for frame in plain[:2]]
    assert light[1] == pytest.approx(light[0], rel=0.03)
    lost = _difference(lost=0.3)
    assert lost[1].astype(float).sum() - background * 96**2 == pytest.approx(0.7 * light[0], rel=0.12)
    new = _difference(new=0.3)
    assert new[1].astype(float).sum() - background * 96**2 == pytest.approx(1.3 * light[0], rel=0.12)
    dim = _difference(brightness=0.5)
    assert dim[1].astype(float).sum() - 100 * 96**2 == pytest.approx(0.5 * (light[0] + 10 * 96**2), rel=0.03)
    blurred = _difference(defocus=2.0)
    assert blurred[1].astype(float).var() < 0.5 * plain[1].astype(float).var()
    hot = _difference(hot_pixels=0.002)
    odd = (hot[0].astype(float) - plain[0]) > 60
    assert 5 < odd.sum() < 40
    dark = _difference(uneven=0.8)
    corner, middle = dark[0][:12, :12].mean() - 100, dark[0][42:54, 42:54].mean() - 100
    assert corner < 0.5 * middle


def test_random_fields_stay_within_their_bounds_and_repeat():
    for seed in range(3):
        made = random_field(np.random.default_rng(seed), shape_px=(192, 192), pixel_size=4e-7)
        again = random_field(np.random.default_rng(seed), shape_px=(192, 192), pixel_size=4e-7)
        assert (made.stressed == again.stressed).all()
        peak = np.hypot(*made.displacement).max() / made.pixel_size
        assert peak < 6.2
        assert made.relaxed.dtype == np.uint16
        assert (made.contractile_moments > 0).all()
        assert set(np.unique(made.labels)) == set(range(len(made.cells) + 1))


def test_a_different_seed_is_a_different_field():
    first = random_field(np.random.default_rng(1), shape_px=(128, 128), pixel_size=6e-7)
    second = random_field(np.random.default_rng(2), shape_px=(128, 128), pixel_size=6e-7)
    assert first.stressed.shape != second.stressed.shape or (first.stressed != second.stressed).mean() > 0.5


def test_what_cannot_be_made_is_refused_in_words():
    rng = np.random.default_rng(0)
    with pytest.raises(InputError, match="reaches outside"):
        a_cell(centre=(2e-6, 2e-6))
    with pytest.raises(InputError, match="shape 'star' is unknown"):
        make_outline(1.0, 1.0, 0.0, rng, kind="star")
    with pytest.raises(InputError, match="must be positive"):
        make_beads((10, 10), 0.0, rng)
    with pytest.raises(InputError, match="give a share"):
        _difference(lost=1.5)
    with pytest.raises(InputError, match="overlaps"):
        make_field([a_cell(), a_cell()], GEL, rng)
    with pytest.raises(InputError, match="no cell and no size"):
        make_field([], GEL, rng)
    with pytest.raises(InputError, match="do not fill"):
        lattice_axis(10, PIXEL, 0.3)
