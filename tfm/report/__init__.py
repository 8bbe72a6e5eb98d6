"""What people see: the report of a results folder, and plotting functions for notebooks.

The report reads a results folder and nothing else. ``matplotlib`` is imported on first use.
"""

from __future__ import annotations

from pathlib import Path

__all__ = ["build_report"]


def build_report(results_dir: Path, *, redo: bool = False, workers: int = 1) -> Path:
    """Write ``report.html`` and ``figures/`` of a results folder, from nothing but that folder.

    Parameters
    ----------
    results_dir
        A folder that ``tfm run`` wrote, finished or not.
    redo
        Draw all pictures anew; by default a picture whose data did not change is kept.
    workers
        Processes that draw; the report is the same for any number.

    Raises
    ------
    InputError
        When the folder holds no tables.
    """
    from tfm.report.pages import build_report as build

    return build(results_dir, redo=redo, workers=workers)
