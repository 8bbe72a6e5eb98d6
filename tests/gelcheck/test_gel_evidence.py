"""The evidence against routes that share no code with it, and against what was put in."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import linalg, stats

from tfm.errors import InputError
from tfm.gel import Gel, node_kernel
from tfm.gelcheck import check_gel, free_poisson, pool_gel
from tfm.gelcheck.evidence import estimate_gel, highest_density
from tfm.gelcheck.reduced import gel_family, reduce_problem
from tfm.gelcheck.surface import coordinate_of, measure_surface
from tfm.moments.dipole import cell_dipoles
from tfm.traction.fourier import infer_fourier
from tfm.traction.gaussian import response_matrix

LAYER = Gel(6e3, 0.42, 25e-6)
HALF_SPACE = Gel(6e3, 0.35)


@pytest.fixture(scope="module")
def layer(case):
    made = case(LAYER)
    return made, *made.infer(LAYER)


def test_log_evidence_is_the_gaussian_density_of_the_data(layer):
    """Outside reference: ``scipy.stats.multivariate_normal.logpdf`` with the covariance written out, flat priors wide.

    Differences between gels are compared, because constants of the flat directions drop out of them.
    """
    _, traction, _ = layer
    problem = reduce_problem(traction, most=60)
    data = problem.data
    rng = np.random.default_rng(0)
    # Few and noisy: flat directions can then be wide and the covariance still well conditioned.
    near = np.sort(rng.choice(data.rows.size, 90, replace=False))
    data = replace(
        data, rows=data.rows[near], columns=data.columns[near], value=data.value[:, near],
        precision=data.precision[:, near] * 1e-3,
    )  # fmt: skip
    small = reduce_problem(replace(traction, data=data), most=60)
    data = small.data
    covariance = np.zeros((2 * data.rows.size,) * 2)
    n = data.rows.size
    for k in range(n):
        p = data.precision[:, k]
        covariance[np.ix_([k, k + n], [k, k + n])] = np.linalg.inv([[p[0], p[1]], [p[1], p[2]]])
    found, expected = [], []
    flat = small.flat
    for nu, h in ((0.2, None), (0.45, None), (0.45, 20e-6)):
        family = gel_family(small, h, nodes=(nu,))
        soft = family.softness(nu)
        kernel = node_kernel(Gel(1.0 + nu, nu, h), data.lattice.shape, data.lattice.spacing, receiver="point")
        response = response_matrix(data, kernel)
        densities = []
        for prior in small.priors:
            # Amplitudes are fixed: the maximum over them is tested elsewhere.
            c = _prior_covariance(small, prior, 1e3 * np.exp(-soft))
            whole = covariance + response @ c @ response.T + 1e-10 * small.motions @ small.motions.T
            densities.append(stats.multivariate_normal.logpdf(data.value.ravel() * 1e8, cov=whole * 1e16))
        total = np.log(np.mean(np.exp(np.array(densities) - max(densities)))) + max(densities)
        information, score = family.normal(nu)
        got = family._evidence_at(information, score, 0.0) + flat.shape[1] * soft
        found.append(got)
        expected.append(total)
    assert np.diff(found) == pytest.approx(np.diff(expected), abs=0.02)


def _prior_covariance(problem, prior, deviation):
    """Covariance of the coefficients given the balance, with the flat directions ``deviation`` wide, not infinite."""
    size = problem.flat.shape[0]
    precision = np.zeros((size, size))
    for cell, a in zip(prior.cells, prior.amplitudes, strict=True):
        precision[np.ix_(cell.index, cell.index)] += cell.precision / a**2
    precision += problem.flat @ problem.flat.T / deviation**2
    free = linalg.null_space(problem.balance)
    return free @ np.linalg.inv(free.T @ precision @ free) @ free.T


def test_interpolated_responses_give_the_evidence_of_the_exact_one(layer):
    _, traction, _ = layer
    problem = reduce_problem(traction)
    for h, share in ((None, 1e-6), (25e-6, 0.01)):
        family = gel_family(problem, h)
        reference = family.softness(0.42)
        exact = [gel_family(problem, h, nodes=(nu,)).log_evidence(nu, reference=reference) for nu in (0.42, 0.2, 0.47)]
        value = [family.log_evidence(nu, reference=reference) for nu in (0.42, 0.2, 0.47)]
        # A hundredth of what separates the gels moves an optimum by a twentieth of its error bar at most.
        assert value == pytest.approx(exact, abs=share * (max(exact) - min(exact)))


def test_evidence_knows_nothing_of_youngs_modulus(case):
    """Displacements do not change when E and all tractions are multiplied by the same number (Hooke's law)."""
    made = case(HALF_SPACE)
    soft, _ = made.infer(replace(HALF_SPACE, youngs_modulus=600.0))
    stiff, _ = made.infer(replace(HALF_SPACE, youngs_modulus=60e3))
    a, b = (measure_surface(reduce_problem(t), t.gel) for t in (soft, stiff))
    near = a.log_evidence > -20
    # What remains is the tolerance at which each inversion stopped its search for the prior's amplitude.
    assert np.abs(a.log_evidence - b.log_evidence)[near].max() < 0.1


@pytest.mark.parametrize(("gel", "seed"), [(LAYER, 2), (LAYER, 3), (HALF_SPACE, 2)])
def test_right_entry_is_not_contradicted_and_poisson_ratio_wrong_by_0_15_is(checked, gel, seed):
    right = checked(gel, gel, seed)
    assert right.verdict in ("agrees", "doubtful")
    assert right.poisson_low <= gel.poisson <= right.poisson_high
    wrong = checked(gel, replace(gel, poisson=gel.poisson - 0.15), seed)
    assert wrong.verdict == "contradicted"
    # The beads, not the entry, decide: both runs point to the same Poisson ratio.
    assert wrong.poisson_best == pytest.approx(right.poisson_best, abs=0.03)
    assert any("Poisson ratio" in note for note in wrong.notes)


def test_thickness_half_of_the_true_one_is_contradicted(checked):
    found = checked(LAYER, replace(LAYER, thickness=12e-6))
    assert found.verdict == "contradicted"
    assert found.thickness_low <= 25e-6 <= found.thickness_high
    assert any("um thick, not 12 um" in note for note in found.notes)


def test_infinitely_thick_gel_has_no_upper_bound(checked):
    found = checked(HALF_SPACE, HALF_SPACE)
    assert found.thickness_high is None
    assert found.thickness_low > 10e-6


def test_noise_alone_cannot_tell(checked):
    found = checked(HALF_SPACE, HALF_SPACE, 2, 1e-6)
    assert found.verdict == "cannot tell"
    assert found.poisson_high - found.poisson_low > 0.35


def test_pooled_fields_are_sharper_and_right(checked):
    single = [checked(LAYER, replace(LAYER, poisson=LAYER.poisson - 0.15), seed) for seed in (2, 3)]
    together = pool_gel(single)
    assert together.fields == 2
    width = together.poisson_high - together.poisson_low
    assert width < min(e.poisson_high - e.poisson_low for e in single)
    assert together.poisson_low <= LAYER.poisson <= together.poisson_high


def test_pooling_refuses_unlike_gels(checked):
    a, b = checked(LAYER, LAYER), checked(HALF_SPACE, HALF_SPACE)
    with pytest.raises(InputError, match="different gels"):
        pool_gel([a, b])
    with pytest.raises(InputError, match="no field has evidence"):
        pool_gel([])


def test_method_without_posterior_cannot_tell(case):
    made = case(HALF_SPACE)
    traction = infer_fourier(made.field, 0.4e-6, made.outlines, HALF_SPACE)
    found = check_gel(traction, cell_dipoles(traction, made.outlines, 0.4e-6))
    assert found.verdict == "cannot tell"
    assert found.poisson_best is None
    assert any("no evidence" in note for note in found.notes)


def test_sensitivity_agrees_with_a_new_inversion_on_the_other_gel(layer, checked):
    """The reduced problem against full inversions of the same vectors on the changed gel."""
    made, _, dipoles = layer
    change = checked(LAYER, LAYER).sensitivity
    energy, moment = dipoles[0].strain_energy, dipoles[0].contractile_moment
    for got, gel in (
        (change.poisson_lower, replace(LAYER, poisson=0.32)),
        (change.infinite, replace(LAYER, thickness=None)),
        (change.thickness_higher, replace(LAYER, thickness=1.1 * 25e-6)),
        (change.modulus_higher, replace(LAYER, youngs_modulus=6.6e3)),
    ):
        other = made.infer(gel)[1][0]
        # The energy of the mean field; a new inversion also counts what the beads do not resolve.
        assert got.moment == pytest.approx(other.contractile_moment / moment - 1.0, abs=0.004)
        assert got.energy == pytest.approx(other.strain_energy / energy - 1.0, abs=0.02)


@pytest.mark.parametrize(("gel", "seed"), [(LAYER, 2), (LAYER, 3), (HALF_SPACE, 2)])
def test_moment_with_free_poisson_ratio_covers_what_was_put_in(case, checked, gel, seed):
    """Entered wrong by 0.15, the moment is off by more than it quotes; left free, the larger error covers the truth."""
    made = case(gel, seed)
    entered = replace(gel, poisson=gel.poisson - 0.15)
    _, dipoles = made.infer(entered)
    freed = free_poisson(checked(gel, entered, seed))
    quoted = dipoles[0].contractile_moment_sd / dipoles[0].contractile_moment
    total = np.hypot(freed.moment_factor_sd, quoted)
    assert total > quoted
    value = dipoles[0].contractile_moment * freed.moment_factor
    # 2 % for nodes of 2 um on a synthetic cell with sharper adhesions, as the bounded method has on the right gel too.
    assert abs(value / made.moment - 1.0) < 2.0 * total + 0.02


def test_shear_modulus_entry_carries_young_s_modulus_along(layer, checked):
    _, traction, dipoles = layer
    plain = checked(LAYER, LAYER).energy_shift_poisson
    shear = check_gel(traction, dipoles, shear=True).energy_shift_poisson
    energy = dipoles[0].strain_energy
    assert (1.0 + shear / energy) / (1.0 + plain / energy) == pytest.approx(1.32 / 1.42, rel=1e-6)


def test_highest_density_against_scipy():
    """Outside reference: intervals of ``scipy.stats`` (normal), and a one-sided exponential that ends at its mode."""
    x = np.linspace(0.0, 30.0, 30001)
    found = highest_density(x, stats.expon.pdf(x), 3.0)
    assert found.low == 0.0
    assert found.high == pytest.approx(stats.expon.ppf(0.95), abs=2e-3)
    assert found.surprise == pytest.approx(stats.expon.cdf(3.0), abs=1e-3)


def test_entered_thickness_counts_as_known_to_a_tenth():
    """An evidence that is flat gives back the belief: the thickness decides nothing, nu stays open."""
    x, nu = np.linspace(0.0, coordinate_of(5e-6), 121), np.linspace(0.0, 0.5, 201)
    flat = estimate_gel(x, nu, np.zeros((121, 201)), Gel(5e3, 0.45, 30e-6))
    assert flat.verdict == "cannot tell"
    assert flat.poisson_mean == pytest.approx(0.25, abs=1e-9)
    assert flat.poisson_sd == pytest.approx(0.5 / np.sqrt(12), rel=0.01)
    # A ridge nu = 0.2 + 0.3 x carries the spread of the thickness into the Poisson ratio.
    ridge = -0.5 * ((nu[None] - 0.1 - 0.3 * x[:, None]) / 0.004) ** 2
    found = estimate_gel(x, nu, ridge, Gel(5e3, 0.45, 30e-6))
    slope = 0.3 * 40.0 / 70.0  # d nu / d ln h at 30 um
    assert found.poisson_mean == pytest.approx(0.1 + 0.3 * coordinate_of(30e-6), abs=0.003)
    assert found.poisson_sd == pytest.approx(np.hypot(0.1 * slope, 0.004), rel=0.05)
