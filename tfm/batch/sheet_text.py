"""From the bytes of a cell sheet to rows of text, whatever program wrote them.

Accepted: UTF-8 with or without byte order mark, every kind of line end, blank rows, comma, semicolon or tab between the
cells, the ``sep=;`` line of spreadsheet programs, quoted cells. Everything else is refused in words: a sheet is never
guessed at.
"""

from __future__ import annotations

import csv
import io
import stat
from dataclasses import dataclass
from pathlib import Path

from tfm.batch.problems import Problem, SheetError, readable

__all__ = ["SheetText", "read_sheet_text"]

#: A sheet of 100,000 rows takes 20 MB; what is larger is not a sheet.
_LARGEST = 64 * 2**20
_NAMES = {",": "comma", ";": "semicolon", "\t": "tab"}
_SIGNATURES = {
    b"PK\x03\x04": "a workbook of a spreadsheet program",
    b"\xd0\xcf\x11\xe0": "a workbook of a spreadsheet program",
    b"II*\x00": "a TIFF image",
    b"MM\x00*": "a TIFF image",
    b"\x89HDF": "an HDF5 or netCDF file",
    b"%PDF": "a PDF file",
}


@dataclass(frozen=True)
class SheetText:
    """Rows of a sheet as text.

    Attributes
    ----------
    header
        Names of the columns, spaces around them removed.
    rows
        Row number of a spreadsheet program, and the cells.
    delimiter
        What separates the cells.
    """

    header: tuple[str, ...]
    rows: tuple[tuple[int, tuple[str, ...]], ...]
    delimiter: str


def _refuse(file: str, message: str, code: str, remedy: str, *, row: int | None = None, value: str = "") -> SheetError:
    return SheetError([Problem(file, row, "", readable(value), message, remedy, code)])


def _read_bytes(path: Path, file: str) -> bytes:
    try:
        status = path.stat()
    except FileNotFoundError as error:
        raise _refuse(file, "there is no such file", "missing-file", "check the path of the sheet") from error
    except (OSError, ValueError) as error:
        raise _refuse(file, f"cannot be opened ({error})", "unreadable-file", "check the path of the sheet") from error
    if not stat.S_ISREG(status.st_mode):
        raise _refuse(file, "is a folder, pipe or device", "not-a-file", "give the CSV file itself")
    if status.st_size > _LARGEST:
        raise _refuse(file, f"has {status.st_size} bytes", "too-large", "give the cell sheet, not the data")
    try:
        return path.read_bytes()
    except OSError as error:
        reason = error.strerror or str(error)
        raise _refuse(file, f"cannot be read ({reason})", "unreadable-file", "check its permissions") from error


def _decode(data: bytes, file: str) -> str:
    csv_utf8 = "save it as 'CSV UTF-8'"
    if not data.strip():
        raise _refuse(file, "the sheet is empty", "empty-sheet", "start from the header row that the README shows")
    for signature, what in _SIGNATURES.items():
        if data.startswith(signature):
            raise _refuse(file, f"this is {what}, not a CSV file", "not-csv", csv_utf8)
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise _refuse(file, "the text is UTF-16", "wrong-encoding", csv_utf8)
    if b"\x00" in data:
        row = data.count(b"\n", 0, data.index(b"\x00")) + 1
        raise _refuse(file, "a zero byte: this is no text file", "not-csv", csv_utf8, row=row)
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        row = data.count(b"\n", 0, error.start) + 1
        message = f"byte 0x{data[error.start]:02x} is not UTF-8"
        raise _refuse(file, message, "wrong-encoding", csv_utf8, row=row) from error
    return text


def _delimiter(line: str) -> str:
    # Names of columns hold neither of the three, so the most frequent one is what separates them.
    counts = {mark: line.count(mark) for mark in _NAMES}
    best = max(counts, key=lambda mark: counts[mark])
    return best if counts[best] else ","


def read_sheet_text(path: Path, *, file: str = "") -> SheetText:
    """Read a sheet as rows of text.

    Parameters
    ----------
    path
        The CSV file.
    file
        Name used in messages; the path as given when empty.

    Raises
    ------
    SheetError
        When the file cannot be read as a CSV table; all ragged rows are listed at once.
    """
    file = file or str(path)
    text = _decode(_read_bytes(path, file), file)
    skipped = 0
    first, _, rest = text.partition("\n")
    if first.strip().lower().startswith("sep=") and len(first.strip()) <= 5:
        text, skipped = rest, 1
    lines = io.StringIO(text, newline="")
    header_line = next((line for line in lines if line.strip().strip(",;\t")), "")
    delimiter = _delimiter(header_line)
    try:
        records = list(csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, strict=True))
    except csv.Error as error:
        reason = str(error)
        raise _refuse(
            file, f"the quotation marks do not match ({reason})", "bad-quotes", "close every quoted cell"
        ) from error
    filled = [(number, row) for number, row in enumerate(records, 1 + skipped) if any(cell.strip() for cell in row)]
    if not filled:
        raise _refuse(file, "the sheet is empty", "empty-sheet", "start from the header row that the README shows")
    header = [cell.strip() for cell in filled[0][1]]
    problems: list[Problem] = []
    rows: list[tuple[int, tuple[str, ...]]] = []
    for number, row in filled[1:]:
        cells = [cell.strip() for cell in row]
        while len(cells) > len(header) and not cells[-1]:
            cells.pop()
        if len(cells) == len(header):
            rows.append((number, tuple(cells)))
            continue
        message = f"{len(cells)} cells where the header has {len(header)}"
        remedy = f"put one {_NAMES[delimiter]} between cells and quotation marks around a cell that holds one"
        problems.append(Problem(file, number, "", readable(delimiter.join(row)), message, remedy, "ragged-row"))
    if problems:
        raise SheetError(problems)
    return SheetText(tuple(header), tuple(rows), delimiter)
