r"""Evidence for Poisson ratio and thickness together: one surface per field, on a grid that all fields of a gel share.

Thickness enters as :math:`x = \ln(1 + \ell/h)` with :math:`\ell` = 40 um, the length of a cell: 0 for an infinitely
thick gel, even steps in :math:`\ln h` for a thin one. Between the thicknesses that were computed the surface is
interpolated (Akima 1970 in the form of makima), and new ones are added where it decides.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import interpolate

from tfm.gel import Gel
from tfm.gelcheck.reduced import GelFamily, ReducedProblem, gel_family

__all__ = ["EvidenceSurface", "coordinate_of", "measure_surface", "thickness_of"]

Array = NDArray[np.float64]

#: m: the length that sets the scale of the thickness coordinate.
CELL_LENGTH = 40e-6
#: m: thinner gels are not tried unless one was entered.
THINNEST = 5e-6
#: Poisson ratios of the shared grid.
POISSON_GRID = np.linspace(0.0, 0.5, 201)
_FIRST_POISSON = (0.0, 0.15, 0.3, 0.4, 0.5)
_LADDER = (np.inf, 80e-6, 40e-6, 20e-6, 10e-6)
_MOST_FAMILIES = 9
#: Differences of log evidence above which a gel is out of the running and its curve need not be fine.
_HOPELESS = 30.0


def coordinate_of(thickness: float | None) -> float:
    """ln(1 + 40 um / h); 0 for an infinitely thick gel.

    Examples
    --------
    >>> coordinate_of(None), round(coordinate_of(40e-6), 6)
    (0.0, 0.693147)
    """
    return 0.0 if thickness is None or np.isinf(thickness) else float(np.log1p(CELL_LENGTH / thickness))


def thickness_of(coordinate: float) -> float:
    """The inverse of :func:`coordinate_of`, m; infinite at 0.

    Examples
    --------
    >>> round(thickness_of(coordinate_of(25e-6)) * 1e6, 6), thickness_of(0.0)
    (25.0, inf)
    """
    return float(CELL_LENGTH / np.expm1(coordinate)) if coordinate > 0 else np.inf


@dataclass(frozen=True)
class EvidenceSurface:
    """Log evidence against thickness and Poisson ratio, highest value 0.

    Attributes
    ----------
    coordinate
        ``(nx,)`` ln(1 + 40 um / h), ascending from 0.
    poisson
        ``(nnu,)``.
    log_evidence
        ``(nx, nnu)``.
    computed
        ``(k,)`` m: thicknesses that were computed (inf = infinitely thick).
    entered
        The family of the entered thickness, for what follows from it.
    reference
        :meth:`GelFamily.softness` of the entered gel.
    """

    coordinate: Array
    poisson: Array
    log_evidence: Array
    computed: Array
    entered: GelFamily
    reference: float


@dataclass
class _Curve:
    """Evidence against the Poisson ratio at one thickness."""

    family: GelFamily
    reference: float
    known: dict[float, float]

    def add(self, poisson: float) -> None:
        if all(abs(poisson - nu) > 2e-3 for nu in self.known):
            self.known[poisson] = self.family.log_evidence(poisson, reference=self.reference)

    def at(self, poisson: Array) -> Array:
        nus = np.array(sorted(self.known))
        return np.asarray(interpolate.CubicSpline(nus, [self.known[v] for v in nus])(poisson))

    def refine(self) -> None:
        """Points at the maximum and on its slopes, where the coarse ones are far apart in units of its width."""
        for _ in range(2):
            fine = self.at(POISSON_GRID)
            best = int(np.argmax(fine))
            near = POISSON_GRID[fine > fine[best] - 4.0]
            if near[-1] - near[0] > 0.2:
                return
            for nu in (POISSON_GRID[best], near[0], near[-1]):
                self.add(float(nu))


def measure_surface(problem: ReducedProblem, gel: Gel) -> EvidenceSurface:
    """Evidence of every gel in one field.

    Parameters
    ----------
    problem
        Of one traction field.
    gel
        As entered.
    """
    thickness = gel.thickness
    thinnest = min(THINNEST, 0.5 * thickness) if thickness is not None else THINNEST
    grid = np.linspace(0.0, coordinate_of(thinnest), 121)
    curves: dict[float, _Curve] = {}
    home = coordinate_of(thickness)
    family = gel_family(problem, thickness)
    reference = family.softness(gel.poisson)
    _add(curves, home, family, reference)
    for x in (*(coordinate_of(h) for h in _LADDER), float(grid[-1])):
        if all(abs(x - other) > 0.08 for other in curves):
            _add(curves, float(x), _family(problem, float(x)), reference)
    while len(curves) < _MOST_FAMILIES:
        gap = _undecided(curves, grid)
        if gap is None:
            break
        _add(curves, gap, _family(problem, gap), reference)
    top = max(max(c.known.values()) for c in curves.values())
    for curve in curves.values():
        if max(curve.known.values()) > top - _HOPELESS:
            curve.refine()
    xs = np.array(sorted(curves))
    rows = np.stack([curves[x].at(POISSON_GRID) for x in xs])
    surface = np.asarray(interpolate.Akima1DInterpolator(xs, rows, axis=0, method="makima")(grid))
    return EvidenceSurface(
        grid, POISSON_GRID, surface - surface.max(), np.array([thickness_of(x) for x in xs]), family, reference,
    )  # fmt: skip


def _family(problem: ReducedProblem, x: float) -> GelFamily:
    h = thickness_of(x)
    return gel_family(problem, None if np.isinf(h) else h)


def _add(curves: dict[float, _Curve], x: float, family: GelFamily, reference: float) -> None:
    curves[x] = _Curve(family, reference, {})
    for nu in _FIRST_POISSON:
        curves[x].add(nu)


def _undecided(curves: dict[float, _Curve], grid: Array) -> float | None:
    """The thickness to compute next: the middle of the widest gap where the evidence still decides, or None."""
    xs = sorted(curves)
    best = {x: float(curves[x].at(POISSON_GRID).max()) for x in xs}
    top = max(best.values())
    wanted: list[tuple[float, float]] = []
    for left, right in itertools.pairwise(xs):
        high = max(best[left], best[right]) - top
        change = abs(best[left] - best[right])
        if right - left > 0.12 and high > -6.0 and change > 1.5:
            wanted.append((min(change, 8.0) * (right - left), 0.5 * (left + right)))
    return max(wanted)[1] if wanted else None
