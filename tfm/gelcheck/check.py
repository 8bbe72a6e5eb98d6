"""The room's door: one field's traction in, what it says about the gel out; and several fields of one gel together."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

from tfm.errors import ConvergenceError, InputError
from tfm.gel import Gel, full_strain, surface_strain
from tfm.gelcheck.evidence import GelEstimate, estimate_gel, pooled_log_evidence
from tfm.gelcheck.plausibility import LINEAR_STRAIN, Outlier, plausibility
from tfm.gelcheck.reduced import reduce_problem
from tfm.gelcheck.sensitivity import Sensitivity, gel_sensitivity
from tfm.gelcheck.surface import measure_surface
from tfm.moments import CellDipole
from tfm.traction.model import TractionField

__all__ = ["FreePoisson", "GelEvidence", "check_gel", "free_poisson", "pool_gel", "strain_peak"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class GelEvidence:
    """What the beads of one field, or of several, say about the gel that was entered. SI; None = not measured.

    Attributes
    ----------
    gel
        As entered.
    verdict
        ``agrees``, ``doubtful``, ``contradicted`` or ``cannot tell`` (:func:`tfm.gelcheck.evidence.verdict_of`; a value
        that only a slip explains makes ``agrees`` or ``cannot tell`` ``doubtful``).
    poisson_best, poisson_low, poisson_high
        Most probable value and 95 % region.
    thickness_best, thickness_low, thickness_high
        m. ``thickness_high`` and ``thickness_best`` are None where an infinitely thick gel cannot be excluded or is
        best; ``thickness_low`` is then the least thickness.
    estimate
        The densities behind the intervals; None for a traction without posterior.
    poisson, poisson_log_evidence
        ``(nnu,)``: the curve, thickness averaged over, highest value 0.
    thickness, thickness_log_evidence
        ``(nx,)``: the same over thickness (m, first value infinite).
    log_evidence
        ``(nx, nnu)``, for pooling.
    coordinate
        ``(nx,)`` ln(1 + 40 um / h).
    strain_energy
        J, all cells together.
    energy_shift_poisson
        J: what entering nu lower by 0.1 would do.
    sensitivity
        Changes of energy, moment and peak traction with nu, E and h.
    strain_peak
        Largest principal strain at the surface, by magnitude.
    outliers
        Values outside the usual ranges.
    fields
        How many were pooled.
    notes
        Sentences for the table.
    """

    gel: Gel
    verdict: str
    poisson_best: float | None = None
    poisson_low: float | None = None
    poisson_high: float | None = None
    thickness_best: float | None = None
    thickness_low: float | None = None
    thickness_high: float | None = None
    estimate: GelEstimate | None = None
    poisson: Array | None = None
    poisson_log_evidence: Array | None = None
    thickness: Array | None = None
    thickness_log_evidence: Array | None = None
    log_evidence: Array | None = None
    coordinate: Array | None = None
    strain_energy: float | None = None
    energy_shift_poisson: float | None = None
    sensitivity: Sensitivity | None = None
    strain_peak: float | None = None
    outliers: tuple[Outlier, ...] = ()
    fields: int = 1
    notes: tuple[str, ...] = ()


def check_gel(
    traction: TractionField,
    dipoles: Sequence[CellDipole],
    *,
    shear: bool = False,
    pixel_size: float | None = None,
) -> GelEvidence:
    """Put the entered gel to the test on one field.

    Parameters
    ----------
    traction
        Of any method; without a posterior (``fourier``) only strain and plausibility are judged.
    dipoles
        The field's cells.
    shear
        The sheet gave the shear modulus, so Young's modulus follows the Poisson ratio.
    pixel_size
        m, for the slips that concern it.

    Examples
    --------
    See ``docs/gelcheck.md`` for a complete run on synthetic beads.
    """
    gel = traction.gel
    outliers = plausibility(gel, dipoles, pixel_size=pixel_size)
    strain = strain_peak(traction)
    notes = [o.sentence for o in outliers]
    if strain > LINEAR_STRAIN:
        notes.append(f"peak strain {strain:.2f} is above {LINEAR_STRAIN}: linear elasticity is doubtful there")
    energies = [d.strain_energy for d in dipoles]
    energy = float(sum(energies)) if energies and all(math.isfinite(e) for e in energies) else None
    base: dict[str, Any] = {"gel": gel, "strain_energy": energy, "strain_peak": strain, "outliers": outliers}
    if traction.data is None or traction.solution is None:
        notes.append("this method has no evidence: run bounded or image to test Poisson ratio and thickness")
        return GelEvidence(verdict="doubtful" if outliers else "cannot tell", notes=tuple(notes), **base)
    try:
        problem = reduce_problem(traction)
        surface = measure_surface(problem, gel)
    except ConvergenceError as error:
        notes.append(f"Poisson ratio and thickness could not be tested: {error.message}")
        return GelEvidence(verdict="doubtful" if outliers else "cannot tell", notes=tuple(notes), **base)
    # A misfit above 1 means noise, or a displacement that no gel explains, that the evidence knows nothing of.
    misfit = traction.misfit if math.isfinite(traction.misfit) else 1.0
    log_evidence = surface.log_evidence / max(1.0, misfit)
    whole = problem if traction.method == "bounded" else reduce_problem(traction, merge=False)
    change = gel_sensitivity(whole, gel, surface.entered, surface.reference, shear=shear)
    lower = change.poisson_lower
    found = _record(gel, surface.coordinate, surface.poisson, log_evidence, outliers, tuple(notes))
    return GelEvidence(
        **{
            **found,
            **base,
            "sensitivity": change,
            "energy_shift_poisson": None if lower is None or energy is None else energy * lower.energy,
        }
    )


def pool_gel(evidences: Sequence[GelEvidence]) -> GelEvidence:
    """Fields of one gel together: log evidence adds up, because their beads are independent.

    Parameters
    ----------
    evidences
        Of fields with the same entries for the gel; those without evidence are left out.

    Raises
    ------
    InputError
        When none has evidence, or the entries differ.
    """
    used = [e for e in evidences if e.log_evidence is not None and e.coordinate is not None and e.poisson is not None]
    if not used:
        raise InputError("no field has evidence", code="nothing-to-pool", remedy="use the method bounded or image")
    first = used[0]
    if any(e.gel != first.gel for e in used):
        raise InputError("the fields have different gels", code="unlike-gels", remedy="pool fields of one gel")
    total = pooled_log_evidence([e.log_evidence for e in used if e.log_evidence is not None])
    outliers = tuple(o for e in used for o in e.outliers)
    if first.coordinate is None or first.poisson is None:
        raise InputError("no field has evidence", code="nothing-to-pool", remedy="use the method bounded or image")
    found = _record(first.gel, first.coordinate, first.poisson, total, outliers, ())
    return GelEvidence(**{**found, "fields": len(used)})


@dataclass(frozen=True)
class FreePoisson:
    """What leaving the Poisson ratio to the beads does to a field's contractile moment and strain energy.

    Multiply the reported value by the factor; ``_sd`` is one standard deviation of the factor, to be added in
    quadrature to the relative error from the images. Young's modulus is held.
    """

    moment_factor: float
    moment_factor_sd: float
    energy_factor: float
    energy_factor_sd: float


def free_poisson(evidence: GelEvidence) -> FreePoisson:
    """Moment and energy with the Poisson ratio averaged over its evidence instead of entered.

    The mean and standard deviation of value(nu) / value(entered nu) over the marginal density of nu (law of total
    variance); the value between the six Poisson ratios that were solved is a cubic spline.

    Parameters
    ----------
    evidence
        Of one field, from a method with a posterior.

    Raises
    ------
    InputError
        When the evidence has no densities or no sensitivity (method ``fourier``, pooled fields).
    """
    change, estimate, poisson = evidence.sensitivity, evidence.estimate, evidence.poisson
    if change is None or estimate is None or poisson is None:
        raise InputError("no evidence of one field", code="no-posterior", remedy="use the method bounded or image")
    found = []
    for ratio in (change.moment_ratio, change.energy_ratio):
        value = CubicSpline(change.poisson, ratio)(poisson)
        mean = float(np.average(value, weights=estimate.poisson_density))
        found += [mean, float(np.sqrt(np.average((value - mean) ** 2, weights=estimate.poisson_density)))]
    return FreePoisson(*found)


def strain_peak(traction: TractionField) -> float:
    """Largest principal strain at the surface by magnitude, from the posterior mean traction."""
    inplane = surface_strain(traction.gel, traction.traction, traction.spacing)
    tensor = full_strain(traction.gel, inplane, traction.traction)
    on = traction.labels > 0
    if not on.any():
        on = np.ones(traction.labels.shape, bool)
    return float(np.abs(np.linalg.eigvalsh(np.moveaxis(tensor[:, :, on], 2, 0))).max())


def _record(
    gel: Gel,
    coordinate: Array,
    poisson: Array,
    log_evidence: Array,
    outliers: tuple[Outlier, ...],
    notes: tuple[str, ...],
) -> dict[str, Any]:
    """The fields of the record that follow from a surface."""
    estimate = estimate_gel(coordinate, poisson, log_evidence, gel)
    nu, h = estimate.poisson, estimate.thickness
    verdict = estimate.verdict
    if outliers and verdict in ("agrees", "cannot tell"):
        verdict = "doubtful"
    with np.errstate(divide="ignore"):
        curves = np.log(estimate.poisson_density), np.log(estimate.thickness_density)
    thickness = np.concatenate([[np.inf], 40e-6 / np.expm1(coordinate[1:])])
    return {
        "gel": gel, "verdict": verdict, "poisson_best": nu.best, "poisson_low": nu.low, "poisson_high": nu.high,
        "thickness_best": _finite(h.best), "thickness_low": _finite(h.low), "thickness_high": _finite(h.high),
        "estimate": estimate, "poisson": poisson, "poisson_log_evidence": np.maximum(curves[0], -700.0),
        "thickness": thickness, "thickness_log_evidence": np.maximum(curves[1], -700.0), "log_evidence": log_evidence,
        "coordinate": coordinate, "outliers": outliers, "notes": (*notes, *_sentences(gel, estimate)),
    }  # fmt: skip


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _sentences(gel: Gel, estimate: GelEstimate) -> list[str]:
    """What a reader has to know about the two intervals."""
    nu, h = estimate.poisson, estimate.thickness
    said = []
    if nu.surprise > 0.95:
        said.append(f"the beads point to a Poisson ratio of {nu.low:.2f} to {nu.high:.2f}, not {gel.poisson:g}")
    entered = "infinitely thick" if gel.thickness is None else f"{gel.thickness * 1e6:.3g} um"
    if math.isfinite(h.high):
        if h.surprise > 0.95:
            said.append(f"the beads point to a gel {h.low * 1e6:.3g} to {h.high * 1e6:.3g} um thick, not {entered}")
    else:
        text = f"the beads tell only that the gel is thicker than {h.low * 1e6:.3g} um"
        said.append(f"{text}, not {entered}" if h.surprise > 0.95 else text)
    return said
