"""Result tables: from the records of the fields to CSV files that come out as the same bytes every time."""

from __future__ import annotations

import csv
import io
import json
import math
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from tfm.batch.schema import TABLES, TableColumn

__all__ = ["columns_json", "format_cell", "table_text"]

#: Significant digits: far beyond any error bar, and short of the digits in which two machines differ.
_DIGITS = 8


def format_cell(value: Any) -> str:
    """One value as a table cell: empty when unmeasured, numbers with at most eight significant digits.

    Examples
    --------
    >>> [format_cell(v) for v in (None, float("nan"), -0.0, 1 / 3, 12, 1e-9, "a")]
    ['', '', '0', '0.33333333', '12', '1e-09', 'a']
    """
    if value is None:
        return ""
    if isinstance(value, str):
        return value
    if isinstance(value, int):
        return str(int(value))
    number = float(value)
    if not math.isfinite(number):
        return ""
    return f"{number:.{_DIGITS}g}" if number else "0"


def table_text(name: str, rows: Iterable[Mapping[str, Any]], extra: Sequence[str] = ()) -> str:
    """A whole table as CSV text.

    Parameters
    ----------
    name
        ``cells``, ``pairs``, ``gel`` or ``fields``.
    rows
        Records by column name; what is absent stays empty.
    extra
        Columns copied from the sheet, after the table's own.
    """
    header = [column.name for column in TABLES[name]] + list(extra)
    stream = io.StringIO(newline="")
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(header)
    writer.writerows([format_cell(row.get(column)) for column in header] for row in rows)
    return stream.getvalue()


def _entry(column: TableColumn) -> dict[str, str]:
    return {"unit": column.unit, "meaning": column.meaning}


def columns_json(extra: Sequence[str] = ()) -> str:
    """Unit and meaning of every column of every table, as JSON."""
    copied = {name: {"unit": "", "meaning": "copied from the cell sheet"} for name in extra}
    found = {
        f"{name}.csv": {**{column.name: _entry(column) for column in columns}, **copied}
        for name, columns in TABLES.items()
    }
    return json.dumps(found, indent=1, ensure_ascii=False) + "\n"
