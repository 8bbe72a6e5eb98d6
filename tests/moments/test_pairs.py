"""Whole-field interaction of two cells: limits, reciprocity, conservation, finite differences."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from known_cell import known_cell

from tfm.gel import Gel, dipole_interaction, displacement
from tfm.images.model import Outlines
from tfm.moments import cell_dipoles, cell_pairs
from tfm.traction.model import TractionField

SPACING = 1e-6


def two_cells(gel, shift=(0, 46), tensors=((-3e7, 1e7, -1e7), (-1e7, -6e6, -2e7)), n=120, radius=6, turn=0.0):
    """Two discs with traction T_i = S_ij (x_j - c_j) on the lattice; the second may be moved and turned."""
    rows, columns = np.indices((n, n)).astype(float)
    labels = np.zeros((n, n), np.int32)
    traction = np.zeros((2, n, n))
    for number, (start, s) in enumerate(
        zip(((50.0, 36.0), (50.0 + shift[0], 36.0 + shift[1])), tensors, strict=True), 1
    ):
        dx, dy = (columns - start[1]) * SPACING, (rows - start[0]) * SPACING
        r = np.hypot(dx, dy) / SPACING
        c, k = (np.cos(turn), np.sin(turn)) if number == 2 else (1.0, 0.0)
        m = np.array([[c, -k], [k, c]]) @ np.array([[s[0], s[1]], [s[1], s[2]]]) @ np.array([[c, k], [-k, c]])
        fade = np.clip(radius - r, 0.0, 4.0) / 4.0
        traction += np.stack([m[0, 0] * dx + m[0, 1] * dy, m[1, 0] * dx + m[1, 1] * dy]) * fade
        labels[r < radius] = number
    axis = np.arange(n) * SPACING
    field = TractionField(
        axis,
        axis,
        SPACING,
        traction,
        displacement(gel, traction, SPACING),
        labels,
        gel,
        "bounded",
        None,
        np.zeros(2),
        1.0,
    )
    outlines = Outlines(labels, "label image")
    return field, cell_dipoles(field, outlines, SPACING)


@pytest.mark.parametrize("gel", [Gel(5000.0, 0.45), Gel(5000.0, 0.35, 40e-6)], ids=["half-space", "layer"])
def test_far_cells_interact_as_point_dipoles(gel):
    """The whole-field energy tends to that of the two tensors as (size / distance)^2 (multipole expansion)."""
    errors = []
    for distance in (24, 48):
        field, dipoles = two_cells(gel, shift=(0, distance), radius=6)
        (pair,) = cell_pairs(field, dipoles)
        errors.append(abs(pair.energy / pair.dipole_energy - 1.0))
    assert errors[1] < 0.05
    assert errors[1] < errors[0] / 2.0


def test_reciprocity_and_the_part_of_the_energy_that_needs_both():
    """W_ab = W_ba (Betti), and U(a and b) = U(a) + U(b) + W."""
    gel = Gel(5000.0, 0.4, 25e-6)
    field, dipoles = two_cells(gel)
    (pair,) = cell_pairs(field, dipoles)
    swapped = replace(field, labels=np.where(field.labels > 0, 3 - field.labels, 0).astype(np.int32))
    (other,) = cell_pairs(swapped, cell_dipoles(swapped, Outlines(swapped.labels, "label image"), SPACING))
    assert other.energy == pytest.approx(pair.energy, rel=1e-9)

    def energy(mask):
        t = field.traction * mask
        return 0.5 * float(np.sum(t * displacement(gel, t, SPACING))) * SPACING**2

    both, a, b = energy(field.labels > 0), energy(field.labels == 1), energy(field.labels == 2)
    assert pair.energy == pytest.approx(both - a - b, rel=1e-6)


def test_force_and_torque_are_minus_the_slope_of_the_energy():
    """Central differences of the whole-field energy against moved and turned copies of cell b."""
    gel = Gel(5000.0, 0.45)
    (pair,) = cell_pairs(*two_cells(gel, shift=(20, 30)))
    for axis, (dr, dc) in enumerate(((0, 1), (1, 0))):
        ahead, behind = (cell_pairs(*two_cells(gel, shift=(20 + s * dr, 30 + s * dc)))[0].energy for s in (1, -1))
        assert pair.force_on_b[axis] == pytest.approx(-(ahead - behind) / (2 * SPACING), rel=0.03)
    step = 0.05
    ahead, behind = (cell_pairs(*two_cells(gel, shift=(20, 30), turn=s * step))[0].energy for s in (1, -1))
    assert pair.torque_on_b == pytest.approx(-(ahead - behind) / (2 * step), rel=0.03)


def test_side_by_side_and_in_line_signs():
    """Equal parallel contractile dipoles in line attract; side by side they repel below nu = 1/3 (common practice)."""
    for poisson, sign in ((0.1, 1), (0.48, -1)):
        gel = Gel(5000.0, poisson)
        stretched = ((-3e7, 0.0, -3e5), (-3e7, 0.0, -3e5))
        (line,) = cell_pairs(*two_cells(gel, shift=(0, 40), tensors=stretched))
        (side,) = cell_pairs(*two_cells(gel, shift=(40, 0), tensors=stretched))
        assert line.energy < 0
        assert np.sign(side.energy) == sign
        assert line.bearing == pytest.approx(0.0, abs=0.01)
        assert side.bearing == pytest.approx(np.pi / 2, abs=0.01)


def test_pair_energy_error_covers_draws_of_the_posterior():
    """Energy and its error from the posterior equal those of 4000 draws of the coefficients (numpy)."""
    from tfm.moments import energy_matrix
    from tfm.traction import infer_bounded

    gel = Gel(2000.0, 0.45)
    cell = known_cell(gel, noise=2e-8, n=160, pixel=0.5e-6)
    # Split the one disc by a vertical line: two touching cells.
    labels = cell.outlines.labels * np.where(np.arange(160)[None, :] < 80, 1, 2).astype(np.int32)
    outlines = Outlines(labels.astype(np.int32), "label image")
    result = infer_bounded(cell.field, cell.pixel, outlines, gel, most_coefficients=300)
    (pair,) = cell_pairs(result, cell_dipoles(result, outlines, cell.pixel), noise_energy=1e-15)
    e = energy_matrix(result.data, result)
    draws = np.random.default_rng(0).multivariate_normal(
        result.posterior.mean, result.posterior.covariance, 4000, method="eigh"
    )
    first = np.tile(result.data.basis.node_labels == 1, 2)
    energies = np.einsum("ki,ij,kj->k", draws[:, first], e[np.ix_(first, ~first)], draws[:, ~first])
    assert pair.energy == pytest.approx(energies.mean(), abs=4 * energies.std() / np.sqrt(4000))
    assert pair.energy_sd == pytest.approx(energies.std(), rel=0.06)
    assert pair.coupling_number == pytest.approx(abs(pair.energy) / 1e-15, rel=1e-12)
    assert "trust energy" in pair.notes[0]
    point = dipole_interaction(gel, [-1e-12, 0, 0], [-1e-12, 0, 0], 40e-6, 0.0)
    assert float(point.energy) < 0


def test_total_error_adds_the_gel():
    """The moment is proportional to E (linear elasticity), so 10 % of E is 10 % of the moment, added in squares; a
    stated error of
    nu and h moves it by what solving again on another gel gives."""
    from tfm.traction import infer_bounded

    gel = Gel(2000.0, 0.45, 20e-6, youngs_modulus_sd=200.0)
    cell = known_cell(gel, noise=5e-9, n=160, pixel=0.5e-6)
    outlines = cell.outlines

    def moment(g):
        return cell_dipoles(
            infer_bounded(cell.field, cell.pixel, outlines, g, most_coefficients=300), outlines, cell.pixel
        )[0]

    found = moment(gel)
    extra = found.contractile_moment_total_sd**2 - found.contractile_moment_sd**2
    assert np.sqrt(extra) == pytest.approx(0.1 * found.contractile_moment, rel=1e-6)
    assert found.budget["youngs_modulus"] == pytest.approx(extra, rel=1e-6)
    loose = moment(replace(gel, youngs_modulus_sd=0.0, poisson_sd=0.03, thickness_sd=2e-6))
    slope_nu = (
        moment(replace(gel, poisson=0.48)).contractile_moment - moment(replace(gel, poisson=0.42)).contractile_moment
    ) / 0.06
    slope_h = (
        moment(replace(gel, thickness=21e-6)).contractile_moment
        - moment(replace(gel, thickness=19e-6)).contractile_moment
    ) / 2e-6
    assert np.sqrt(loose.budget["poisson"]) == pytest.approx(abs(slope_nu) * 0.03, rel=0.15)
    assert np.sqrt(loose.budget["thickness"]) == pytest.approx(abs(slope_h) * 2e-6, rel=0.15)
