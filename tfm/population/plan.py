r"""The error bar to expect before the experiment: from gel, beads, photons, pixels, cell and expected pull. No images.

The posterior's covariance does not depend on the images but only on the information they carry,
:math:`(H + \Lambda)^{-1}`: H follows from bead density, photons and the bead's image, :math:`\Lambda` from the strength
of the traction. Invented cells of the size asked give displacement and outline; the beads' information per area is the
photon limit of two noisy frames (Cramer-Rao), times what the pixel method keeps of it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import erf

from tfm.errors import InputError
from tfm.gel import Gel, dipole_interaction
from tfm.moments import axis_deviation
from tfm.synth import SyntheticCell, cell_displacements, displacement_at, make_cell_traction
from tfm.traction.blocks import make_blocks
from tfm.traction.bounded import choose_step, solve, whole_groups
from tfm.traction.gaussian import Component, LinearData
from tfm.traction.lattice import cover_outlines, image_lattice, make_nodes
from tfm.traction.prior import first_moments

__all__ = ["METHOD_EFFICIENCY", "ExpectedErrors", "Setup", "bead_information", "expected_errors", "improvements"]

#: Share of the photon limit's information that the pixel method keeps (measured: ``bench_population.py plan``).
METHOD_EFFICIENCY = 0.80

_TRACE = np.array([-1.0, 0.0, -1.0])
#: A dipole counts as detected from this many of its own standard deviations on.
_DETECTED = 3.0


@dataclass(frozen=True)
class Setup:
    """An experiment that has not been done yet. SI; bead numbers per frame.

    Attributes
    ----------
    gel
        The gel.
    pixel_size
        m.
    field_px
        Edge of the square field in pixels.
    beads_per_area
        1/m^2.
    photons
        Detected photons per bead and frame.
    bead_sigma
        m, standard deviation of a bead's image.
    background
        Photons per pixel that come from no bead.
    read_noise
        Photons, one standard deviation per pixel.
    cell_length, cell_width
        m.
    contractile_moment
        N m, expected.
    distance
        m, between the centres of two such cells, for the pair energy; None leaves it out.
    brightness_spread
        Relative spread of brightness among beads.
    """

    gel: Gel
    pixel_size: float
    field_px: int
    beads_per_area: float
    photons: float
    bead_sigma: float
    background: float
    read_noise: float
    cell_length: float
    cell_width: float
    contractile_moment: float
    distance: float | None = None
    brightness_spread: float = 0.25


@dataclass(frozen=True)
class ExpectedErrors:
    """What to expect of a setup; medians over the invented cells.

    Attributes
    ----------
    moment_sd
        N m, of the contractile moment.
    dipole_sd
        ``(3,)`` N m, of P_xx, P_xy, P_yy for a cell along x.
    axis_sd
        rad, of the major axis.
    pair_energy, pair_energy_sd
        J: two such cells in line at the distance asked, from their tensors alone; None without a distance.
    smallest_moment
        N m: contractile moment that equals three of its own standard deviations.
    displacement_peak
        m, largest displacement to expect.
    displacement_noise
        m, standard error of the mean displacement of a 4 um square of ground, for orientation.
    information
        1/m^4: information of the beads per area of ground, one component.
    cells
        Invented cells that the medians are over.
    """

    moment_sd: float
    dipole_sd: NDArray[np.float64]
    axis_sd: float
    pair_energy: float | None
    pair_energy_sd: float | None
    smallest_moment: float
    displacement_peak: float
    displacement_noise: float
    information: float
    cells: int


def bead_information(
    density_per_px2: float,
    photons: float,
    sigma_px: float,
    background: float,
    read_noise: float,
    *,
    brightness_spread: float = 0.25,
) -> float:
    r"""Information about a shift between two frames, per pixel^2 of ground and per component, 1/px^2 per px^2.

    A bead of N photons with pixel-integrated Gaussian image p says about its own position
    :math:`I_1 = \sum (N \partial_x p)^2 / (N p + b + r^2)` (Cramer-Rao bound for Poisson light, b background, r read
    noise; Ober, Ram & Ward, Biophys J 86:1185, 2004). Both frames are noisy, which halves it; the mean light of the
    other beads adds to the background.

    Examples
    --------
    With much light and no background the bound is sigma^2 / N, textbook:

    >>> round(bead_information(1e-6, 1e6, 1.5, 0.0, 0.0, brightness_spread=0.0) / (0.5e-6 * 1e6 / (1.5**2 + 1 / 12)), 2)
    1.0
    """
    edges = np.arange(-int(6 * sigma_px) - 3, int(6 * sigma_px) + 4) - 0.5
    light = background + read_noise**2 + density_per_px2 * photons
    total = 0.0
    # Gauss-Hermite over the lognormal brightness, a few places of the bead within its pixel.
    points, weights = np.polynomial.hermite_e.hermegauss(5)
    for point, weight in zip(points, weights / weights.sum(), strict=True):
        level = photons * np.exp(brightness_spread * point - 0.5 * brightness_spread**2)
        for place in (0.0, 0.25, 0.5, 0.75):
            across = 0.5 * np.diff(erf((edges - place) / (np.sqrt(2) * sigma_px)))
            centre = 0.5 * np.diff(erf(edges / (np.sqrt(2) * sigma_px)))
            gauss = np.exp(-0.5 * ((edges - place) / sigma_px) ** 2) / (np.sqrt(2 * np.pi) * sigma_px)
            slope = np.outer(centre, -np.diff(gauss)) * level
            total += weight / 4 * float((slope**2 / (np.outer(centre, across) * level + light)).sum())
    return float(0.5 * density_per_px2 * total)


def _invented_cells(setup: Setup, count: int, seed: int) -> list[SyntheticCell]:
    shape = (setup.field_px, setup.field_px)
    middle = 0.5 * (setup.field_px - 1) * setup.pixel_size
    if 1.35 * setup.cell_length > setup.field_px * setup.pixel_size:
        raise InputError(
            f"a cell of {setup.cell_length * 1e6:.0f} um does not fit a field of"
            f" {setup.field_px * setup.pixel_size * 1e6:.0f} um",
            code="cell-too-large",
            remedy="image a larger field",
        )
    return [
        make_cell_traction(
            shape,
            setup.pixel_size,
            centre=(middle, middle),
            length=setup.cell_length,
            width=setup.cell_width,
            angle=0.0,
            contractile_moment=setup.contractile_moment,
            rng=np.random.default_rng((seed, k)),
            kind="elongated",
        )
        for k in range(count)
    ]


def _checked(setup: Setup) -> None:
    for name in (
        "pixel_size", "field_px", "beads_per_area", "photons", "bead_sigma", "cell_length", "cell_width",
        "contractile_moment",
    ):  # fmt: skip
        if not getattr(setup, name) > 0:
            raise InputError(f"{name} is {getattr(setup, name)}", code="bad-setup", remedy="give a positive value")
    for name in ("background", "read_noise"):
        if not getattr(setup, name) >= 0:
            raise InputError(f"{name} is {getattr(setup, name)}", code="bad-setup", remedy="give 0 or more")


@dataclass(frozen=True)
class _Measured:
    """One invented cell as the inversion would see it: exact shifts of the beads' blocks, their noise, the answer."""

    cell: SyntheticCell
    data: LinearData
    exact: NDArray[np.float64]
    noise: NDArray[np.float64]
    response: NDArray[np.float64]
    functionals: NDArray[np.float64]
    covariance: NDArray[np.float64]
    estimate: NDArray[np.float64]
    components: tuple[Component, ...]
    moment: float
    peak: float


def _measure(
    setup: Setup, cell: SyntheticCell, information: float, most_coefficients: int, rng: np.random.Generator
) -> _Measured:
    pixel = setup.pixel_size
    lattice, _ = image_lattice(cell.mask.shape, pixel)
    covered = cover_outlines(lattice, cell.mask.astype(np.int32), pixel)
    basis = make_nodes(covered, step=choose_step(covered, most=most_coefficients))
    blocks = make_blocks(covered > 0, smallest=2, largest=16, ratio=3.0)
    groups, _ = whole_groups(covered)
    weight = information * (blocks.size * lattice.spacing) ** 2
    field = cell_displacements([cell], setup.gel, margin_px=0)[0]
    places = np.stack(
        [lattice.x0 + blocks.columns * lattice.spacing, lattice.y0 + blocks.rows * lattice.spacing], axis=1
    )
    u = displacement_at(field, 0.0, pixel, places).T
    noise = rng.standard_normal(u.shape) / np.sqrt(weight)
    precision = np.stack([weight, np.zeros_like(weight), weight])
    data = LinearData(lattice, basis, blocks.rows, blocks.columns, u + noise, precision, groups)
    solution, normal = solve(data, setup.gel)
    moments = first_moments(basis, lattice, 1)
    # Rows 2..5: integrals of dx T_x, dy T_x, dx T_y, dy T_y; the tensor's off-diagonal is the symmetric half.
    functionals = np.stack([moments[2], 0.5 * (moments[3] + moments[4]), moments[5]])
    return _Measured(
        cell=cell,
        data=data,
        exact=u,
        noise=noise,
        response=normal.response,
        functionals=functionals,
        covariance=functionals @ solution.covariance @ functionals.T,
        estimate=functionals @ solution.mean,
        components=solution.components,
        moment=setup.contractile_moment,
        peak=float(np.sqrt((field**2).sum(axis=0)).max()),
    )


def _smallest_moment(setup: Setup, measured: _Measured) -> float:
    """Moment equal to three of its standard deviations; a weaker cell is measured anew, with the same beads."""
    moment = setup.contractile_moment
    covariance = measured.covariance
    for _ in range(4):
        new = _DETECTED * float(np.sqrt(_TRACE @ covariance @ _TRACE))
        if abs(new - moment) < 0.05 * moment:
            return new
        moment = new
        value = measured.exact * (moment / setup.contractile_moment) + measured.noise
        # The lengths stay, the strength of the prior follows the weaker pull.
        weaker = tuple(replace(c, amplitudes=c.amplitudes * (moment / measured.moment)) for c in measured.components)
        solution, _ = solve(
            replace(measured.data, value=value), setup.gel, start=weaker, response=measured.response, search=False
        )
        covariance = measured.functionals @ solution.covariance @ measured.functionals.T
    return moment


def _pair(setup: Setup, dipole: NDArray[np.float64], covariance: NDArray[np.float64]) -> tuple[float, float]:
    """Energy of two such cells in line and its standard deviation, tensors of independent errors."""
    pair = dipole_interaction(setup.gel, dipole, dipole, float(setup.distance or 0.0), 0.0)
    second = np.asarray(
        dipole_interaction(setup.gel, dipole, np.eye(3), float(setup.distance or 0.0), 0.0).energy_by_dipole_a
    )
    ga, gb = np.asarray(pair.energy_by_dipole_a), np.asarray(pair.energy_by_dipole_b)
    # W is bilinear: both errors together add tr(M C M^T C) to the delta method.
    variance = (
        ga @ covariance @ ga + gb @ covariance @ gb + float(np.trace(second @ covariance @ second.T @ covariance))
    )
    return float(np.asarray(pair.energy)), float(np.sqrt(variance))


def expected_errors(
    setup: Setup, *, cells: int = 3, seed: int = 1, most_coefficients: int = 300, efficiency: float = METHOD_EFFICIENCY
) -> ExpectedErrors:
    """Expected error bars of a setup.

    Parameters
    ----------
    setup
        The experiment.
    cells
        Number of invented cells of that size, pulling along x; results are medians over them.
    seed
        Of the invented cells.
    most_coefficients
        Size of the dense problem. The inversion takes 1,100; from 250 on the expected error changes by less than 3 %.
    efficiency
        Share of the photon limit that the method keeps.

    Raises
    ------
    InputError
        For values that are not positive or a cell that does not fit.

    Examples
    --------
    >>> setup = Setup(Gel(5e3, 0.45), 0.4e-6, 160, 0.15e12, 400, 0.5e-6, 10, 1.5, 25e-6, 12e-6, 0.3e-12)
    >>> faint = expected_errors(setup, cells=1, most_coefficients=200)
    >>> bright = expected_errors(replace(setup, photons=4000), cells=1, most_coefficients=200)
    >>> bool(bright.moment_sd < 0.7 * faint.moment_sd)
    True
    """
    _checked(setup)
    per_px2 = setup.beads_per_area * setup.pixel_size**2
    information = (
        efficiency
        * bead_information(
            per_px2,
            setup.photons,
            setup.bead_sigma / setup.pixel_size,
            setup.background,
            setup.read_noise,
            brightness_spread=setup.brightness_spread,
        )
        / setup.pixel_size**4
    )
    rng = np.random.default_rng((seed, 99))
    found = [_measure(setup, c, information, most_coefficients, rng) for c in _invented_cells(setup, cells, seed)]
    covariances = np.array([m.covariance for m in found])
    pairs = [_pair(setup, m.cell.dipole, c) for m, c in zip(found, covariances, strict=True)] if setup.distance else []
    axes = [axis_deviation(m.cell.dipole, c) for m, c in zip(found, covariances, strict=True)]
    return ExpectedErrors(
        moment_sd=float(np.median([np.sqrt(_TRACE @ c @ _TRACE) for c in covariances])),
        dipole_sd=np.median(np.sqrt(np.diagonal(covariances, axis1=1, axis2=2)), axis=0),
        axis_sd=float(np.median(axes)),
        pair_energy=float(np.median([p[0] for p in pairs])) if pairs else None,
        pair_energy_sd=float(np.median([p[1] for p in pairs])) if pairs else None,
        smallest_moment=float(np.median([_smallest_moment(setup, m) for m in found])),
        displacement_peak=float(np.median([m.peak for m in found])),
        displacement_noise=float(1 / np.sqrt(information * (4e-6) ** 2)),
        information=information,
        cells=len(found),
    )


def improvements(setup: Setup) -> Mapping[str, Setup]:
    """The same experiment with one thing made better at a time; the cell and its pull stay.

    ``half the pixel`` keeps optics, light per area and field of view in um: background light per pixel falls by four,
    read noise per pixel stays. ``twice the exposure`` doubles beads' and background's photons.
    """
    return {
        "as asked": setup,
        "twice the beads": replace(setup, beads_per_area=2 * setup.beads_per_area),
        "twice the exposure": replace(setup, photons=2 * setup.photons, background=2 * setup.background),
        "half the stiffness": replace(
            setup,
            gel=replace(
                setup.gel,
                youngs_modulus=0.5 * setup.gel.youngs_modulus,
                youngs_modulus_sd=0.5 * setup.gel.youngs_modulus_sd,
            ),
        ),
        "half the pixel": replace(
            setup, pixel_size=0.5 * setup.pixel_size, field_px=2 * setup.field_px, background=0.25 * setup.background
        ),
        "half the background": replace(setup, background=0.5 * setup.background),
        "field 1.5 times as wide": replace(setup, field_px=round(1.5 * setup.field_px)),
    }


def ranked(results: Mapping[str, ExpectedErrors]) -> Sequence[tuple[str, float]]:
    """Changes with the factor by which each shrinks the moment's error, most helpful first."""
    base = results["as asked"].moment_sd
    factors = [(name, base / r.moment_sd) for name, r in results.items() if name != "as asked"]
    return sorted(factors, key=lambda item: -item[1])
