"""Are the numbers those of cells on a gel? And if not: which slip of the pen would explain them?

Displacements say nothing about Young's modulus: every traction and energy is proportional to what was typed in. What is
left is to compare with what adherent cells on soft gels are known to do (ranges from memory, common practice, wide on
purpose: a number outside is wrong more often than it is a discovery).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from tfm.gel import Gel
from tfm.moments import CellDipole

__all__ = ["RANGES", "Outlier", "Slip", "plausibility", "plausible_gel"]

#: Quantity -> smallest and largest plausible value (SI), unit for sentences, SI value of that unit. From memory.
RANGES: dict[str, tuple[float, float, str, float]] = {
    "Young's modulus": (50.0, 300e3, "kPa", 1e3),
    "thickness": (2e-6, 3e-3, "um", 1e-6),
    "cell area": (20e-12, 30e-9, "um2", 1e-12),
    "contractile moment": (1e-15, 200e-12, "pN m", 1e-12),
    "strain energy": (1e-18, 100e-12, "fJ", 1e-15),
    "peak traction": (2.0, 60e3, "Pa", 1.0),
    "peak displacement": (0.005e-6, 30e-6, "um", 1e-6),
}
#: Largest strain for which linear elasticity is trusted (common practice).
LINEAR_STRAIN = 0.2
#: Ratios of objective magnifications (10, 20, 40, 60, 63, 100 times; tubes of 1.5 and 1.6), and um typed as nm.
_MAGNIFICATIONS = (1.5, 1.6, 2.0, 2.5, 3.0, 4.0, 5.0, 6.0, 6.3, 10.0)
_SWAPPED = 3.0


@dataclass(frozen=True)
class Slip:
    """A slip that would bring the numbers back: its name, the entry it would put right and the values it would give.

    ``entry`` is the corrected entry in SI (None where there is none); ``values`` quantity -> corrected value, SI.
    """

    name: str
    entry: float | None
    values: Mapping[str, float]


@dataclass(frozen=True)
class Outlier:
    """A quantity outside its range, and the slips that would explain it, likeliest first; ``sentence`` says so."""

    quantity: str
    value: float
    low: float
    high: float
    slips: tuple[Slip, ...]
    sentence: str


def plausible_gel(gel: Gel) -> tuple[Outlier, ...]:
    """What the entries alone show, before any image is read.

    Examples
    --------
    >>> plausible_gel(Gel(5.0, 0.45))[0].slips[0].name
    'kPa typed as Pa'
    """
    return _judge(_of_gel(gel), gel, None)


def plausibility(
    gel: Gel, dipoles: Sequence[CellDipole], *, pixel_size: float | None = None
) -> tuple[Outlier, ...]:  # fmt: skip
    """Entries and results of one field against :data:`RANGES`.

    Parameters
    ----------
    gel
        As entered.
    dipoles
        The field's cells; the one that pulls most counts.
    pixel_size
        m, for the corrected entry.

    Returns
    -------
    One record per quantity outside; none if everything is plausible.
    """
    values = _of_gel(gel)
    if dipoles:
        strongest = max(dipoles, key=lambda d: abs(d.contractile_moment))
        values |= {
            "cell area": float(np.median([d.area for d in dipoles])),
            "contractile moment": strongest.contractile_moment,
            "strain energy": strongest.strain_energy,
            "peak traction": strongest.traction_peak,
            "peak displacement": strongest.displacement_peak,
        }
        # A faint cell has a moment near zero of either sign: that is noise, not a slip.
        sd = strongest.contractile_moment_sd
        if sd is None or abs(strongest.contractile_moment) < _SWAPPED * sd:
            values["contractile moment"] = float("nan")
            values["strain energy"] = float("nan")
    return _judge({k: v for k, v in values.items() if np.isfinite(v)}, gel, pixel_size)


def _of_gel(gel: Gel) -> dict[str, float]:
    values = {"Young's modulus": gel.youngs_modulus}
    if gel.thickness is not None:
        values["thickness"] = gel.thickness
    return values


def _inside(quantity: str, value: float) -> bool:
    low, high, _, _ = RANGES[quantity]
    return low <= value <= high


def _judge(values: Mapping[str, float], gel: Gel, pixel_size: float | None) -> tuple[Outlier, ...]:
    outside = [q for q, v in values.items() if not _inside(q, v)]
    found = []
    for quantity in outside:
        slips = []
        for slip, factors in _slips(gel, pixel_size):
            if quantity not in factors:
                continue
            new = {q: v * factors[q] for q, v in values.items() if q in factors}
            others = [q for q in factors if q in values and q != quantity]
            # It has to put this quantity right and must not push a plausible one out.
            if _inside(quantity, new[quantity]) and all(_inside(q, new[q]) or q in outside for q in others):
                slips.append(Slip(slip.name, slip.entry, new))
        found.append(_outlier(quantity, values[quantity], tuple(slips[:2])))
    return tuple(found)


def _slips(gel: Gel, pixel_size: float | None) -> list[tuple[Slip, dict[str, float]]]:
    """Candidate slips with the factors by which the quantities would change, likeliest first."""
    stress = ("Young's modulus", "contractile moment", "strain energy", "peak traction")
    shear = 2.0 * (1.0 + gel.poisson)
    candidates: list[tuple[Slip, dict[str, float]]] = [
        (Slip("relaxed and stressed image swapped", None, {}), {"contractile moment": -1.0})
    ]
    for name, factor in (
        ("kPa typed as Pa", 1e3),
        ("Pa typed as kPa", 1e-3),
        ("shear modulus typed as Young's modulus", shear),
        ("Young's modulus typed as shear modulus", 1.0 / shear),
    ):
        candidates.append((Slip(name, gel.youngs_modulus * factor, {}), dict.fromkeys(stress, factor)))
    for ratio in (*_MAGNIFICATIONS, 1e3):
        for f in (ratio, 1.0 / ratio):
            name = f"pixel size off by a magnification of {ratio:g}" if ratio < 1e3 else (
                "pixel size in um typed as nm" if f > 1 else "pixel size in nm typed as um")  # fmt: skip
            entry = None if pixel_size is None else pixel_size * f
            # At a given E, stress and strain stay; lengths scale by f.
            scale = {"cell area": f**2, "peak displacement": f, "contractile moment": f**3, "strain energy": f**3}
            candidates.append((Slip(name, entry, {}), scale))
    if gel.thickness is not None:
        for name, f in (("um typed as nm", 1e3), ("mm typed as um", 1e3), ("nm typed as um", 1e-3)):
            candidates.append((Slip(f"thickness in {name}", gel.thickness * f, {}), {"thickness": f}))
    return candidates


def _outlier(quantity: str, value: float, slips: tuple[Slip, ...]) -> Outlier:
    low, high, unit, scale = RANGES[quantity]
    usual = f"{low / scale:.3g} to {high / scale:.3g} {unit}"
    text = f"{quantity} {value / scale:.3g} {unit} is outside what is usual ({usual})"
    if slips:
        text += ": " + " or ".join(f"{s.name}? It would be {s.values[quantity] / scale:.3g} {unit}" for s in slips)
    return Outlier(quantity, value, low, high, slips, text)
