"""Every error that the package raises on purpose.

One base, three kinds, so that a caller can tell *what the user typed is wrong* (:class:`InputError`) from *this field
cannot be measured* (:class:`MeasurementError`) from *an iteration did not converge* (:class:`ConvergenceError`).
Anything else that escapes is a fault of ours.
"""

from __future__ import annotations

__all__ = ["ConvergenceError", "InputError", "MeasurementError", "TfmError"]


class TfmError(Exception):
    """Base of all errors raised on purpose.

    Parameters
    ----------
    message
        One line that says what is wrong, without the place.
    code
        A short stable word, for instance ``bare-number``, that scripts may rely on.
    remedy
        One imperative clause that says what to do.
    file, row, column
        Where it is wrong; ``row`` counts the lines of the file as a spreadsheet does (the header is row 1).

    Examples
    --------
    >>> print(TfmError("5 has no unit", code="bare-number", file="cells.csv", row=3, column="thickness",
    ...                remedy="write for instance '30 um'"))
    cells.csv, row 3, column thickness: 5 has no unit; write for instance '30 um' [bare-number]
    """

    default_code = "error"

    def __init__(
        self,
        message: str,
        *,
        code: str | None = None,
        remedy: str = "",
        file: str = "",
        row: int | None = None,
        column: str = "",
    ) -> None:
        super().__init__(message)
        self.message = " ".join(message.split())
        self.code = code or self.default_code
        self.remedy = remedy
        self.file = file
        self.row = row
        self.column = column

    def __str__(self) -> str:
        place = ", ".join(
            part
            for part in (
                self.file,
                f"row {self.row}" if self.row is not None else "",
                f"column {self.column}" if self.column else "",
            )
            if part
        )
        text = f"{place}: {self.message}" if place else self.message
        if self.remedy:
            text += f"; {self.remedy}"
        return f"{text} [{self.code}]"

    def at(self, *, file: str = "", row: int | None = None, column: str = "") -> TfmError:
        """The same error with the place filled in where it was not known yet."""
        return type(self)(
            self.message,
            code=self.code,
            remedy=self.remedy,
            file=self.file or file,
            row=self.row if self.row is not None else row,
            column=self.column or column,
        )

    def __reduce__(self) -> tuple[object, ...]:
        # Errors cross process borders in a batch; keyword-only arguments need help to do so.
        return (_rebuild, (type(self), self.message, self.code, self.remedy, self.file, self.row, self.column))


def _rebuild(
    kind: type[TfmError], message: str, code: str, remedy: str, file: str, row: int | None, column: str
) -> TfmError:
    return kind(message, code=code, remedy=remedy, file=file, row=row, column=column)


class InputError(TfmError):
    """What the user gave cannot be used: a sheet, a file, an option or an argument."""

    default_code = "bad-input"


class MeasurementError(TfmError):
    """The input is readable, but this field cannot be measured; the other fields can."""

    default_code = "not-measurable"


class ConvergenceError(TfmError):
    """An iteration ended without meeting its tolerance."""

    default_code = "not-converged"
