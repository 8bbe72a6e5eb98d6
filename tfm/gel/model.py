"""The gel: the three numbers that elasticity needs, and how well each of them is known."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tfm.errors import InputError

__all__ = ["Gel"]


def _number(name: str, value: object, remedy: str) -> float:
    if isinstance(value, (bool, np.bool_)) or not isinstance(value, (int, float, np.integer, np.floating)):
        raise InputError(f"{name} is {value!r}, not a number", code="bad-gel", remedy=remedy)
    number = float(value)
    if not math.isfinite(number):
        raise InputError(f"{name} is {number}, not a finite number", code="bad-gel", remedy=remedy)
    return number


def _positive(name: str, value: object, remedy: str) -> float:
    number = _number(name, value, remedy)
    if number <= 0.0:
        raise InputError(f"{name} is {number:g}, which is not above 0", code="bad-gel", remedy=remedy)
    return number


def _poisson(value: object) -> float:
    remedy = "give a Poisson ratio from 0 to 0.5"
    poisson = _number("poisson", value, remedy)
    if not 0.0 <= poisson <= 0.5:
        raise InputError(f"poisson is {poisson:g}, outside 0 to 0.5", code="bad-gel", remedy=remedy)
    return poisson


@dataclass(frozen=True)
class Gel:
    """A linear, isotropic gel, infinitely thick or bonded to a rigid base.

    Attributes
    ----------
    youngs_modulus
        Pa, above 0.
    poisson
        Poisson ratio, 0 to 0.5 inclusive.
    thickness
        m, above 0; None = infinitely thick (half-space).
    youngs_modulus_sd, poisson_sd, thickness_sd
        One standard deviation of each (Pa, none, m); 0 = taken as exact.
    modulus_poisson_correlation
        Correlation of the errors of Young's modulus and Poisson ratio, -1 to 1. It is 0 when both were measured
        independently; :meth:`from_shear_modulus` sets it, because E = 2 G (1 + nu) then shares the error of nu.

    Change a value with :func:`dataclasses.replace`, which checks again.

    Raises
    ------
    InputError
        Naming the argument, its value and the remedy.

    Examples
    --------
    >>> from dataclasses import replace
    >>> gel = Gel(5e3, 0.45, 30e-6)
    >>> round(gel.shear_modulus, 3)
    1724.138
    >>> replace(gel, thickness=None).is_half_space
    True
    """

    youngs_modulus: float
    poisson: float
    thickness: float | None = None
    youngs_modulus_sd: float = 0.0
    poisson_sd: float = 0.0
    thickness_sd: float = 0.0
    modulus_poisson_correlation: float = 0.0

    def __post_init__(self) -> None:
        modulus = _positive("youngs_modulus", self.youngs_modulus, "give Young's modulus in Pa, for instance 5e3")
        poisson = _poisson(self.poisson)
        thickness = self.thickness
        if thickness is not None:
            thickness = _positive(
                "thickness", thickness, "give the thickness in m, for instance 30e-6, or None for infinitely thick"
            )
        values = {"youngs_modulus": modulus, "poisson": poisson, "thickness": thickness}
        for name in ("youngs_modulus_sd", "poisson_sd", "thickness_sd"):
            sd = _number(name, getattr(self, name), "give one standard deviation, 0 or more")
            if sd < 0.0:
                raise InputError(
                    f"{name} is {sd:g}, below 0", code="bad-gel", remedy="give one standard deviation, 0 or more"
                )
            values[name] = sd
        if thickness is None and self.thickness_sd > 0.0:
            raise InputError(
                f"thickness_sd is {self.thickness_sd:g} but there is no thickness",
                code="bad-gel",
                remedy="give the thickness too, or leave thickness_sd at 0",
            )
        correlation = _number("modulus_poisson_correlation", self.modulus_poisson_correlation, "give -1 to 1")
        if not -1.0 <= correlation <= 1.0:
            raise InputError(
                f"modulus_poisson_correlation is {correlation:g}, outside -1 to 1",
                code="bad-gel",
                remedy="give -1 to 1",
            )
        values["modulus_poisson_correlation"] = correlation
        for name, value in values.items():  # numpy scalars become floats, so that gels compare, hash and print alike
            object.__setattr__(self, name, value)

    @classmethod
    def from_shear_modulus(
        cls,
        shear_modulus: float,
        poisson: float,
        thickness: float | None = None,
        *,
        shear_modulus_sd: float = 0.0,
        poisson_sd: float = 0.0,
        thickness_sd: float = 0.0,
    ) -> Gel:
        """The gel whose *shear* modulus was measured (a rheometer's G'): E = 2 G (1 + nu).

        The error of nu enters E, so the two become correlated; :attr:`covariance` carries that.

        Raises
        ------
        InputError
            As the class does, and for a shear modulus that is not a positive number.

        Examples
        --------
        >>> gel = Gel.from_shear_modulus(2e3, 0.45, poisson_sd=0.05)
        >>> round(gel.youngs_modulus, 6), round(gel.youngs_modulus_sd, 6), gel.modulus_poisson_correlation
        (5800.0, 200.0, 1.0)
        """
        modulus = _positive("shear_modulus", shear_modulus, "give the shear modulus in Pa, for instance 2e3")
        modulus_sd = _number("shear_modulus_sd", shear_modulus_sd, "give one standard deviation, 0 or more")
        if modulus_sd < 0.0:
            raise InputError(
                f"shear_modulus_sd is {modulus_sd:g}, below 0",
                code="bad-gel",
                remedy="give one standard deviation, 0 or more",
            )
        nu = _poisson(poisson)
        plain = cls(2.0 * modulus * (1.0 + nu), nu, thickness, 0.0, poisson_sd, thickness_sd)
        from_nu = 2.0 * modulus * plain.poisson_sd
        sd = math.hypot(2.0 * (1.0 + plain.poisson) * modulus_sd, from_nu)
        return cls(
            plain.youngs_modulus,
            plain.poisson,
            plain.thickness,
            sd,
            plain.poisson_sd,
            plain.thickness_sd,
            from_nu / sd if sd > 0.0 else 0.0,
        )

    @property
    def shear_modulus(self) -> float:
        """G = E / (2 (1 + nu)), Pa."""
        return self.youngs_modulus / (2.0 * (1.0 + self.poisson))

    @property
    def is_half_space(self) -> bool:
        """Whether the gel counts as infinitely thick."""
        return self.thickness is None

    @property
    def covariance(self) -> NDArray[np.float64]:
        """``(3, 3)`` covariance of (Young's modulus, Poisson ratio, thickness), in Pa and m.

        With a gradient ``g`` of any result in the same order, ``g @ covariance @ g`` is the variance that the gel's
        stated uncertainty gives it.
        """
        sd = np.array([self.youngs_modulus_sd, self.poisson_sd, self.thickness_sd])
        correlation = np.eye(3)
        correlation[0, 1] = correlation[1, 0] = self.modulus_poisson_correlation
        return np.asarray(correlation * np.outer(sd, sd), dtype=np.float64)
