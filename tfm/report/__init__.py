"""What people see: the report of a results folder, and plotting functions for notebooks.

The report reads a results folder and nothing else. ``matplotlib`` is imported on first use.
"""

from __future__ import annotations

from pathlib import Path

__all__ = ["build_report"]


def build_report(results_dir: Path, *, redo: bool = False) -> Path:
    """Write ``report.html`` and ``figures/`` of a results folder; see :func:`tfm.report.pages.build_report`."""
    from tfm.report.pages import build_report as build

    return build(results_dir, redo=redo)
