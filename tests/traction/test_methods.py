"""The three methods on cells whose dipole is known from elementary integrals or from the invented beads."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from known_cell import known_cell
from scipy import ndimage

from tfm.displacement import measure_displacement
from tfm.errors import MeasurementError
from tfm.gel import Gel
from tfm.images.model import Outlines
from tfm.moments import cell_dipoles, field_strain_energy
from tfm.synth import random_field
from tfm.traction import infer_bounded, infer_fourier, infer_image

GELS = [Gel(2000.0, 0.5), Gel(8000.0, 0.3, 12e-6)]


@pytest.mark.parametrize("gel", GELS, ids=["half-space", "layer"])
def test_bounded_returns_the_dipole_that_was_put_in(gel):
    """Exact displacement of a known traction, 1 nm noise: tensor within 1 % or three standard deviations."""
    cell = known_cell(gel, noise=1e-9)
    result = infer_bounded(cell.field, cell.pixel, cell.outlines, gel)
    (found,) = cell_dipoles(result, cell.outlines, cell.pixel)
    sd = np.sqrt(np.diag(found.covariance))
    assert np.all(np.abs(found.dipole - cell.dipole) < 3 * sd + 0.01 * np.abs(cell.dipole).max())
    assert sd.max() < 0.05 * np.abs(cell.dipole).max()
    # A free cell pulls itself along neither way (Newton's third law).
    assert found.net_force < 1e-9 * found.force_total
    assert abs(found.torque) < 1e-9 * found.force_total * cell.radius


def test_bounded_error_bar_is_the_scatter():
    """Sixteen draws of the noise: scatter of the contractile moment equals the quoted error (chi-square, 99.9 %)."""
    from scipy import stats

    gel = GELS[0]
    draws = []
    for seed in range(16):
        cell = known_cell(gel, noise=2e-8, seed=seed, n=160, pixel=0.5e-6)
        (found,) = cell_dipoles(
            infer_bounded(cell.field, cell.pixel, cell.outlines, gel, most_coefficients=400), cell.outlines, cell.pixel
        )
        draws.append((found.contractile_moment, found.contractile_moment_sd))
    moments, quoted = np.array(draws).T
    ratio = np.sum((moments - moments.mean()) ** 2) / np.mean(quoted) ** 2
    assert stats.chi2.ppf(0.0005, 15) < ratio < stats.chi2.ppf(0.9995, 15)


def test_gaps_and_offset_do_not_bend_the_dipole():
    """Vectors that are missing are left out, a uniform shift of the frame is estimated, never read as a pull."""
    gel = GELS[0]
    cell = known_cell(gel, noise=1e-9)
    rng = np.random.default_rng(1)
    valid = rng.uniform(size=cell.field.valid.shape) > 0.15
    shifted = np.where(valid, cell.field.u + np.array([40e-9, -70e-9])[:, None, None], np.nan)
    field = replace(cell.field, u=shifted, valid=valid, rejected=int((~valid).sum()))
    result = infer_bounded(field, cell.pixel, cell.outlines, gel)
    (found,) = cell_dipoles(result, cell.outlines, cell.pixel)
    sd = np.sqrt(np.diag(found.covariance))
    assert np.all(np.abs(found.dipole - cell.dipole) < 3 * sd + 0.01 * np.abs(cell.dipole).max())
    np.testing.assert_allclose(result.offset, [40e-9, -70e-9], rtol=0, atol=2e-9)


def test_rotation_turns_the_tensor():
    """The same beads turned by a quarter turn: xx and yy change places, xy changes sign (tensor algebra)."""
    gel = GELS[1]
    cell = known_cell(gel, noise=1e-9)
    u = np.stack([-np.rot90(cell.field.u[1], -1), np.rot90(cell.field.u[0], -1)])
    p = np.stack(
        [
            np.rot90(cell.field.precision[2], -1),
            -np.rot90(cell.field.precision[1], -1),
            np.rot90(cell.field.precision[0], -1),
        ]
    )
    # The grid reaches one pixel further at one side than at the other; its mirror image does the opposite.
    last = (cell.outlines.labels.shape[0] - 1) * cell.pixel
    turned = replace(cell.field, u=u, precision=p, x=last - cell.field.y[::-1], y=cell.field.x)
    outlines = Outlines(np.ascontiguousarray(np.rot90(cell.outlines.labels, -1)), "label image")
    plain = cell_dipoles(infer_bounded(cell.field, cell.pixel, cell.outlines, gel), cell.outlines, cell.pixel)[0].dipole
    other = cell_dipoles(infer_bounded(turned, cell.pixel, outlines, gel), outlines, cell.pixel)[0].dipole
    np.testing.assert_allclose(other, [plain[2], -plain[1], plain[0]], rtol=0, atol=5e-3 * np.abs(plain).max())


@pytest.mark.parametrize("choice", ["gcv", "evidence", "discrepancy", "lcurve"])
def test_fourier_on_clean_displacement(choice):
    """1 nm of noise: every published choice of lambda comes within 15 % of the moment (smoothing takes the rest)."""
    gel = GELS[0]
    cell = known_cell(gel, noise=1e-9)
    result = infer_fourier(cell.field, cell.pixel, cell.outlines, gel, choice=choice)
    (found,) = cell_dipoles(result, cell.outlines, cell.pixel)
    truth = -(cell.dipole[0] + cell.dipole[2])
    assert found.contractile_moment == pytest.approx(truth, rel=0.15)
    assert found.contractile_moment_sd > 0


def test_fourier_error_bar_is_the_scatter_of_the_noise():
    from scipy import stats

    gel = GELS[0]
    draws = []
    for seed in range(24):
        cell = known_cell(gel, noise=1e-8, seed=seed, n=160, pixel=0.5e-6)
        (found,) = cell_dipoles(
            infer_fourier(cell.field, cell.pixel, cell.outlines, gel, choice="discrepancy"), cell.outlines, cell.pixel
        )
        draws.append((found.contractile_moment, found.contractile_moment_sd))
    moments, quoted = np.array(draws).T
    ratio = np.sum((moments - moments.mean()) ** 2) / np.mean(quoted) ** 2
    # Lambda follows the noise too, so the bound is wide; without the noise's correlation it would be far outside.
    assert stats.chi2.ppf(1e-4, 23) < ratio < 2 * stats.chi2.ppf(0.9999, 23)


@pytest.fixture(scope="module")
def bead_field():
    return random_field(
        np.random.default_rng(11),
        gel=Gel(4000.0, 0.45, 30e-6),
        shape_px=(384, 384),
        pixel_size=0.2e-6,
        cells=1,
        peak_shift_px=2.5,
        density_per_px2=0.02,
        photons=600.0,
    )


@pytest.fixture(scope="module")
def image_result(bead_field):
    f = bead_field
    frames = [np.asarray(a, np.float32) for a in (f.relaxed, f.stressed)]
    quiet = ndimage.distance_transform_edt(f.labels == 0) * f.pixel_size > 8e-6
    start = measure_displacement(*frames, f.pixel_size, quiet=quiet, mode="start")
    outlines = Outlines(f.labels, "label image")
    return frames, start, outlines, infer_image(*frames, f.pixel_size, outlines, f.gel, start=start)


def test_image_method_finds_what_the_beads_were_given(bead_field, image_result):
    *_, outlines, result = image_result
    (found,) = cell_dipoles(result, outlines, bead_field.pixel_size)
    sd = np.sqrt(np.diag(found.covariance))
    assert np.all(np.abs(found.dipole - bead_field.dipoles[0]) < 3.3 * sd)
    assert sd.max() < 0.06 * found.contractile_moment
    assert abs(found.strain_energy - bead_field.strain_energies[0]) < 3.3 * found.strain_energy_sd
    assert result.statistics["converged"]
    assert 0.7 < result.misfit < 1.4
    assert found.net_force < 1e-9 * found.force_total


def test_image_method_beats_no_information_it_does_not_have(bead_field, image_result):
    """Quoted displacement information against the Cramer-Rao bound from the known photons (sum of squared gradients
    of the
    expected frame over its variance, common practice): not more than it, not less than 60 % of it."""
    *_, result = image_result
    f = bead_field
    expected = ndimage.gaussian_filter(f.relaxed.astype(float), 0.0)
    data = result.data
    # The bound of two frames that differ by a shift: variances add. Noise in the gradients is taken off with the
    # known variance.
    gy, gx = np.gradient(expected)
    noise = f.relaxed_variance / 2  # of a central difference of independent pixels
    both = f.relaxed_variance + f.stressed_variance
    bound = np.sum(((gx**2 - noise) + (gy**2 - noise))[8:-8, 8:-8] / both[8:-8, 8:-8]) / f.pixel_size**2
    quoted = np.sum(data.precision[0] + data.precision[2])
    assert 0.6 < quoted / bound < 1.1


def test_energy_three_ways(image_result):
    """Real space, Parseval and the quadratic form of the coefficients are one energy."""
    *_, result = image_result
    values = [field_strain_energy(result, route=r) for r in ("real space", "fourier", "coefficients")]
    np.testing.assert_allclose(values, values[0], rtol=1e-6)


def test_restart_from_the_frame_before(bead_field, image_result):
    frames, start, outlines, result = image_result
    again = infer_image(*frames, bead_field.pixel_size, outlines, bead_field.gel, start=start, previous=result)
    a, b = (cell_dipoles(r, outlines, bead_field.pixel_size)[0] for r in (result, again))
    np.testing.assert_allclose(a.dipole, b.dipole, rtol=0, atol=0.1 * a.contractile_moment_sd)
    assert again.statistics["steps"] <= result.statistics["steps"]


def test_brightness_and_lost_beads_do_not_matter(bead_field, image_result):
    """A stressed frame 30 % dimmer with a dark patch of lost beads gives the same dipole within its error."""
    frames, start, outlines, result = image_result
    spoiled = frames[1] * 0.7 + 25.0
    spoiled[60:84, 300:330] = np.median(spoiled)
    again = infer_image(frames[0], spoiled, bead_field.pixel_size, outlines, bead_field.gel, start=start)
    a, b = (cell_dipoles(r, outlines, bead_field.pixel_size)[0] for r in (result, again))
    assert np.all(np.abs(a.dipole - b.dipole) < 1.0 * np.sqrt(np.diag(a.covariance)))


def test_an_outline_drawn_too_small_is_noticed(bead_field, image_result):
    """The same beads with an outline shrunk by 2 um: the ring outside it is not explained, and the note says so."""
    frames, start, _, result = image_result
    f = bead_field
    depth = ndimage.distance_transform_edt(f.labels > 0) * f.pixel_size
    small = Outlines(np.where(depth > 2e-6, f.labels, 0).astype(np.int32), "label image")
    shrunk = infer_image(*frames, f.pixel_size, small, f.gel, start=start)
    assert any("just outside the outline" in note for note in shrunk.notes)
    assert not any("just outside the outline" in note for note in result.notes)


def test_refusals(bead_field, image_result):
    frames, start, outlines, _ = image_result
    f = bead_field
    with pytest.raises(MeasurementError, match="constant"):
        infer_image(frames[0], np.full_like(frames[1], 7.0), f.pixel_size, outlines, f.gel, start=start)
    with pytest.raises(MeasurementError, match="use two frames of the same camera region"):
        infer_image(frames[0], frames[1][:-3], f.pixel_size, outlines, f.gel, start=start)
    with pytest.raises(MeasurementError, match="no outline"):
        infer_image(*frames, f.pixel_size, Outlines(np.zeros_like(f.labels), "label image"), f.gel, start=start)
