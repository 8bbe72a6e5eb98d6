"""Settings of a run and the values of one row, validated once and passed on unchanged."""

from __future__ import annotations

from typing import Any, Literal

from pydantic import BaseModel, ConfigDict, Field

__all__ = ["METHODS", "LambdaChoice", "Method", "RowValues", "RunSettings"]

Method = Literal["auto", "image", "bounded", "fourier"]
LambdaChoice = Literal["gcv", "l-curve", "discrepancy", "evidence"]
METHODS: tuple[str, ...] = ("auto", "image", "bounded", "fourier")


class RunSettings(BaseModel):
    """What a run does with every row; part of the resume key.

    ``auto`` means ``image`` where there are bead images and ``bounded`` where the row starts from a field that was
    measured elsewhere.

    Examples
    --------
    >>> RunSettings(method="bounded").method
    'bounded'
    """

    model_config = ConfigDict(extra="forbid", frozen=True)

    method: Method = "auto"
    lambda_choice: LambdaChoice = "gcv"
    gel_check: bool = True


class RowValues(BaseModel):
    """One row of the cell sheet: paths as typed, quantities in SI units; None = the cell is empty."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    field: str
    row: int
    stressed: str = ""
    relaxed: str = ""
    displacement: str = ""
    traction: str = ""
    outline: str = ""
    pixel: float | None = None
    pixel_sd: float | None = None
    youngs_modulus: float | None = None
    youngs_modulus_sd: float | None = None
    shear_modulus: float | None = None
    shear_modulus_sd: float | None = None
    poisson: float | None = None
    poisson_sd: float | None = None
    thickness: float | None = None
    thickness_sd: float | None = None
    condition: str = ""
    frame_interval: float | None = None
    bead_channel: int | None = None
    z: int | Literal["sharpest", "max"] = "sharpest"
    noise_energy: float | None = None
    extra: dict[str, str] = Field(default_factory=dict)

    @property
    def source(self) -> str:
        """``images``, ``displacement`` or ``traction``: what the row starts from."""
        if self.stressed:
            return "images"
        return "displacement" if self.displacement else "traction"

    def used(self) -> dict[str, Any]:
        """The values that the numbers depend on, for the resume key.

        The name, the row's place, the condition and the copied columns do not enter a computation: changing them
        changes the tables and recomputes nothing. Paths are not here either; the files' contents are hashed.
        """
        skipped = {"field", "row", "condition", "extra", "stressed", "displacement", "traction"}
        values = self.model_dump(exclude=skipped)
        values["relaxed"] = "quietest" if self.relaxed == "quietest" else ""
        values["outline"] = "auto" if self.outline.startswith("auto:") else ""
        values["source"] = self.source
        return {key: value for key, value in values.items() if value not in (None, "")}
