"""Writes docs/columns.md from the meanings of the tables' columns. Run: ``python tests/docs/generate_columns.py``."""

from __future__ import annotations

from pathlib import Path

from tfm.batch.schema import TABLES

PAGE = Path(__file__).parents[2] / "docs" / "columns.md"

HEAD = """# Every column of the tables

A results folder holds four tables (CSV, UTF-8, comma, decimal point), in the order of the sheet. `columns.json` in the
same folder repeats what stands here. An empty cell means "not measured". Frame, signs and units: {doc}`conventions`.

`fields/<field>.nc` holds the arrays (netCDF, SI units): displacement and its precision, traction, the displacement that
the traction causes, cell labels, and small pictures of the bead images. `run.json` holds inputs with their hashes,
settings, versions and times.
"""
ABOUT = {
    "cells": "One row per field, cell and frame.",
    "pairs": "One row per field, frame and pair of cells.",
    "gel": "One row per field: what was entered, and what the beads say about it.",
    "fields": "One row per field and frame.",
}


def columns_page() -> str:
    """The page as Markdown."""
    parts = [HEAD]
    for name, columns in TABLES.items():
        parts.append(f"## {name}.csv\n\n{ABOUT[name]} Columns of the sheet that are not known are copied to the end.\n")
        lines = ["| column | unit | meaning |", "|---|---|---|"]
        lines += [f"| `{c.name}` | {c.unit} | {c.meaning} |" for c in columns]
        parts.append("\n".join(lines) + "\n")
    return "\n".join(parts)


if __name__ == "__main__":
    PAGE.write_text(columns_page(), encoding="utf-8")
