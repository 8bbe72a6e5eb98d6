"""What is wrong with an input, collected so that all of it can be said at once."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from tfm.errors import InputError, TfmError

__all__ = ["Problem", "SheetError", "readable"]

_SHOWN = 60
_LONGEST = 400


def readable(value: str, *, limit: int = _SHOWN) -> str:
    """What a person typed, fit for one line of a terminal: control characters escaped, long text cut.

    Examples
    --------
    >>> readable("two" + chr(10) + "lines"), readable("x" * 100, limit=5)
    ('two\\\\nlines', 'xxxx…')
    """
    text = "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in value)
    return text if len(text) <= limit else text[: limit - 1] + "…"


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong, and where.

    Attributes
    ----------
    file
        The sheet's name as the user gave it.
    row
        Line of a spreadsheet program (the header is row 1); None when the whole file is meant.
    column
        Name of the column, empty when a whole row or file is meant.
    value
        What stands there.
    message
        What is wrong, without the place.
    remedy
        One imperative clause.
    code
        A short stable word.
    field
        Name of the imaged field that the row describes, where it is known.
    """

    file: str
    row: int | None
    column: str
    value: str
    message: str
    remedy: str
    code: str
    field: str = ""

    @classmethod
    def from_error(
        cls, error: TfmError, *, file: str, row: int | None, column: str = "", value: str = "", field: str = ""
    ) -> Problem:
        """A problem from an error that another room raised, with the place in the sheet filled in."""
        message = error.message
        if error.file and error.file != file and error.file not in message:
            message = f"{error.file}: {message}"
        return cls(file, row, error.column or column, value, message, error.remedy, error.code, field)

    def error(self) -> InputError:
        """The same as an error of one line."""
        return InputError(
            readable(self.message, limit=_LONGEST),
            code=self.code,
            remedy=self.remedy,
            file=readable(self.file, limit=_LONGEST),
            row=self.row,
            column=readable(self.column),
        )

    def __str__(self) -> str:
        return str(self.error())


class SheetError(InputError):
    """A cell sheet that cannot be used; ``problems`` lists everything that is wrong with it.

    Examples
    --------
    >>> said = ("'5' has no unit", "write for instance '30 um'", "bare-number")
    >>> problem = Problem("cells.csv", 3, "thickness", "5", *said)
    >>> print(SheetError([problem, problem]))
    cells.csv, row 3, column thickness: '5' has no unit; write for instance '30 um' [bare-number] (and 1 more)
    """

    def __init__(self, problems: Iterable[Problem]) -> None:
        self.problems = tuple(problems)
        first = self.problems[0]
        super().__init__(
            first.message,
            code=first.code,
            remedy=first.remedy,
            file=first.file,
            row=first.row,
            column=first.column,
        )

    def __str__(self) -> str:
        more = len(self.problems) - 1
        return super().__str__() + (f" (and {more} more)" if more else "")

    def __reduce__(self) -> tuple[object, ...]:
        return (SheetError, (self.problems,))
