"""``tfm pairs``: the pair table from dipole tensors alone, without images."""

from __future__ import annotations

import csv
import math
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfm.batch.atomic import write_text
from tfm.batch.tables import table_text
from tfm.errors import InputError
from tfm.gel import Gel, dipole_interaction
from tfm.units import from_si

__all__ = ["pair_rows", "read_cells", "write_pair_table"]

_NEEDED = ("field", "cell", "x_um", "y_um", "dipole_xx_pNm", "dipole_xy_pNm", "dipole_yy_pNm")
_NUMBERS = _NEEDED[2:]
_SPREAD = (
    "dipole_xx_sd_pNm",
    "dipole_xy_sd_pNm",
    "dipole_yy_sd_pNm",
    "cov_xx_xy_pNm2",
    "cov_xx_yy_pNm2",
    "cov_xy_yy_pNm2",
)
_UM, _PNM = 1e-6, 1e-12


def read_cells(path: Path) -> list[dict[str, Any]]:
    """Cells with a dipole, in the table's order; failed cells are left out.

    Returns
    -------
    Records with ``field``, ``frame``, ``cell``, ``place`` (m), ``dipole`` (N m) and ``covariance`` ((N m)^2 or None).

    Raises
    ------
    InputError
        Naming file, row, column and remedy.
    """
    file = str(path)
    try:
        with path.open(newline="", encoding="utf-8-sig") as stream:
            reader = csv.DictReader(stream)
            header = [name.strip() for name in reader.fieldnames or []]
            missing = [name for name in _NEEDED if name not in header]
            if missing:
                raise InputError(
                    f"no column {', '.join(missing)}",
                    code="missing-column",
                    file=file,
                    row=1,
                    remedy=f"a table of cells has {', '.join(_NEEDED)}, separated by commas",
                )
            reader.fieldnames = header
            found = [cell for n, row in enumerate(reader, 2) if (cell := _cell(row, n, file)) is not None]
    except FileNotFoundError as error:
        raise InputError("there is no such file", code="missing-file", file=file, remedy="check the path") from error
    except OSError as error:
        raise InputError(
            f"cannot be read ({error.strerror})", code="unreadable-file", file=file, remedy="name the table itself"
        ) from error
    except (UnicodeDecodeError, csv.Error) as error:
        raise InputError(
            "this is no CSV table in UTF-8", code="not-csv", file=file, remedy="save as CSV UTF-8"
        ) from error
    seen: dict[tuple[str, int, str], int] = {}
    for cell in found:
        key = (cell["field"], cell["frame"], cell["cell"])
        if key in seen:
            raise InputError(
                f"cell {cell['cell']} of field '{cell['field']}' stands in row {seen[key]} already",
                code="duplicate-cell",
                file=file,
                row=cell["row"],
                column="cell",
                remedy="give every cell of a field and frame its own number",
            )
        seen[key] = cell["row"]
    return found


def _number(row: Mapping[str, Any], name: str, line: int, file: str) -> float | None:
    text = str(row.get(name) or "").strip()
    if not text:
        return None
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise InputError(
            f"'{text[:40]}' is no number",
            code="bad-number",
            file=file,
            row=line,
            column=name,
            remedy="write a plain number",
        )
    return value


def _cell(row: Mapping[str, Any], line: int, file: str) -> dict[str, Any] | None:
    if not any(str(value or "").strip() for value in row.values()) or row.get("status") == "failed":
        return None
    values = {name: _number(row, name, line, file) for name in (*_NUMBERS, *_SPREAD, "frame")}
    for name in _NUMBERS:
        if values[name] is None:
            raise InputError(
                "the cell is empty",
                code="empty-cell",
                file=file,
                row=line,
                column=name,
                remedy="fill it in or delete the row",
            )
    name = str(row.get("cell") or "").strip()
    if not name:
        raise InputError(
            "the cell has no number", code="empty-cell", file=file, row=line, column="cell", remedy="number it"
        )
    covariance = None
    if all(values[n] is not None for n in _SPREAD):
        sx, sxy, sy, a, b, c = (float(values[n] or 0.0) for n in _SPREAD)
        covariance = np.array([[sx**2, a, b], [a, sxy**2, c], [b, c, sy**2]]) * _PNM**2
    return {
        "field": str(row.get("field") or "").strip(),
        "frame": int(values["frame"] or 0),
        "cell": name,
        "row": line,
        "place": np.array([values["x_um"], values["y_um"]], dtype=float) * _UM,
        "dipole": np.array([values[n] for n in _NUMBERS[2:]], dtype=float) * _PNM,
        "covariance": covariance,
    }


def pair_rows(cells: list[dict[str, Any]], gel: Gel, *, noise_energy: float | None = None) -> list[dict[str, Any]]:
    """Rows of pairs.csv for every two cells of the same field and frame.

    ``energy`` is the whole fields' matter and stays empty; ``dipole_energy`` is what the tensors give.

    Examples
    --------
    >>> cell = {"field": "a", "frame": 0, "dipole": np.array([-1e-12, 0.0, 0.0]), "covariance": None}
    >>> two = [cell | {"cell": n, "place": np.array([x, 0.0])} for n, x in (("1", 0.0), ("2", 20e-6))]
    >>> round(pair_rows(two, Gel(1e3, 0.5))[0]["dipole_energy_fJ"], 3)
    -119.366
    """
    groups: dict[tuple[str, int], list[dict[str, Any]]] = {}
    for cell in cells:
        groups.setdefault((cell["field"], cell["frame"]), []).append(cell)
    return [
        _pair(a, b, gel, noise_energy) for group in groups.values() for i, a in enumerate(group) for b in group[i + 1 :]
    ]


def _pair(a: dict[str, Any], b: dict[str, Any], gel: Gel, noise: float | None) -> dict[str, Any]:
    x, y = (float(v) for v in b["place"] - a["place"])
    distance = math.hypot(x, y)
    row: dict[str, Any] = {
        "field": a["field"],
        "frame": a["frame"],
        "cell_a": a["cell"],
        "cell_b": b["cell"],
        "distance_um": from_si(distance, "um"),
    }
    if distance == 0.0:
        return {**row, "status": "failed", "notes": "both cells stand at the same place"}
    found = dipole_interaction(gel, a["dipole"], b["dipole"], x, y)
    energy = float(found.energy)
    bearing = math.degrees(math.atan2(y, x))
    row |= {
        "bearing_deg": 180.0 if bearing <= -180.0 else bearing,
        "dipole_energy_fJ": from_si(energy, "fJ"),
        "force_on_b_x_pN": from_si(float(found.force_on_b[0]), "pN"),
        "force_on_b_y_pN": from_si(float(found.force_on_b[1]), "pN"),
        "torque_on_b_fNm": from_si(float(found.torque_on_b), "fNm"),
        "status": "ok",
        "notes": "",
    }
    if a["covariance"] is not None and b["covariance"] is not None:
        variance = _quadratic(found.energy_by_dipole_a, a["covariance"]) + _quadratic(
            found.energy_by_dipole_b, b["covariance"]
        )
        row["dipole_energy_sd_fJ"] = from_si(math.sqrt(max(variance, 0.0)), "fJ")
    if noise:
        row["coupling_number"] = abs(energy) / noise
    return row


def _quadratic(gradient: NDArray[np.float64], covariance: NDArray[np.float64]) -> float:
    return float(gradient @ covariance @ gradient)


def write_pair_table(path: Path, gel: Gel, output: str, *, noise_energy: float | None = None) -> tuple[int, int]:
    """Read cells, write pairs (``-`` = stdout); returns the number of pairs and of failed ones.

    Raises
    ------
    InputError
        For a table that cannot be used.
    StorageError
        When the file cannot be written.
    """
    rows = pair_rows(read_cells(path), gel, noise_energy=noise_energy)
    text = table_text("pairs", rows)
    if output == "-":
        sys.stdout.write(text)
    else:
        target = Path(output)
        if target.exists() and target.resolve() == path.resolve():
            raise InputError(
                "would overwrite the table of cells", code="would-overwrite", file=output, remedy="choose another name"
            )
        write_text(target, text)
    return len(rows), sum(row["status"] == "failed" for row in rows)
