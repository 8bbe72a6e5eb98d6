"""One row of the sheet from its files to table rows: the rooms, put together."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from tfm.batch.arrays import store_arrays, store_pictures
from tfm.batch.elsewhere import MeasuredSource, open_measured
from tfm.batch.frames import FrameResult, ImageSource, quietest_frame
from tfm.batch.gelrow import gel_row, make_gel
from tfm.batch.inputs import RowFiles, frame_interval
from tfm.batch.netcdf import FieldWriter
from tfm.batch.rows import cell_row, failed_field_row, field_row, join_notes, pair_row
from tfm.batch.settings import RowValues, RunSettings
from tfm.errors import InputError, MeasurementError, TfmError
from tfm.images import cells_cut_by_edge, matching_shape, open_frames, read_outline_stack, resolve_pixel_size
from tfm.moments import CellDipole, cell_dipoles, cell_pairs

__all__ = ["FieldResult", "measure_field"]

#: Standard deviations by which all cells of a frame have to push outwards before a swap is suspected.
_SWAPPED = 3.0


@dataclass
class FieldResult:
    """What a field gave.

    Attributes
    ----------
    status, message
        Worst over its frames and cells, and why.
    cells, pairs, fields
        Table rows without the columns that the sheet gives.
    gel
        The row of gel.csv, or None when the field failed.
    gel_evidence
        Log evidence against Poisson ratio and thickness, in the tables' units.
    budget
        One entry per cell and frame: variance of the contractile moment by source, (pN m)^2.
    quality
        Numbers that a reader of the report judges the field by.
    statistics
        What the methods say about their iterations, by frame.
    seconds
        Time by stage.
    """

    status: str = "ok"
    message: str = ""
    cells: list[dict[str, Any]] = field(default_factory=list)
    pairs: list[dict[str, Any]] = field(default_factory=list)
    fields: list[dict[str, Any]] = field(default_factory=list)
    gel: dict[str, Any] | None = None
    gel_evidence: dict[str, Any] = field(default_factory=dict)
    budget: list[dict[str, Any]] = field(default_factory=list)
    quality: dict[str, Any] = field(default_factory=dict)
    statistics: list[dict[str, Any]] = field(default_factory=list)
    seconds: dict[str, float] = field(default_factory=dict)

    def warn(self, note: str) -> None:
        """Add a sentence to every row that gives a number, and make it ``caution``."""
        for row in (*self.cells, *self.pairs, *self.fields):
            if row["status"] != "failed":
                key = "message" if "message" in row else "notes"
                row["status"], row[key] = "caution", join_notes([row[key], note])

    def settle(self) -> None:
        """Set status and message from the rows."""
        words = [row["status"] for row in (*self.fields, *self.cells, *self.pairs)]
        if all(row["status"] == "failed" for row in self.fields):
            self.status = "failed"
        else:
            self.status = "ok" if set(words) <= {"ok"} else "caution"
        self.message = join_notes(
            (row.get("message", "") for row in self.fields), (row.get("notes", "") for row in self.cells)
        )


@dataclass
class _Run:
    """State while the frames of one field are measured."""

    row: RowValues
    settings: RunSettings
    writer: FieldWriter
    log: Callable[[str], None]
    pixel: float
    interval: float | None
    result: FieldResult
    best: FrameResult | None = None
    best_dipoles: tuple[CellDipole, ...] = ()
    best_energy: float = -1.0

    def time_of(self, frame: int) -> float | None:
        return None if self.interval is None else frame * self.interval

    def spent(self, stage: str, since: float) -> None:
        self.result.seconds[stage] = self.result.seconds.get(stage, 0.0) + time.perf_counter() - since


def measure_field(
    row: RowValues,
    files: RowFiles,
    settings: RunSettings,
    writer: FieldWriter,
    log: Callable[[str], None],
) -> FieldResult:
    """Measure one field, frame by frame.

    A frame that cannot be measured gets a ``failed`` row and the others go on.

    Parameters
    ----------
    row, files, settings
        What to measure and how.
    writer
        Takes the arrays.
    log
        Takes sentences for the field's log.

    Raises
    ------
    TfmError
        When the field as a whole cannot be measured.
    """
    began = time.perf_counter()
    source = _open_images(row, files, settings) if row.source == "images" else _open_measured(row, files, settings)
    interval = row.frame_interval
    frames = source.frames if isinstance(source, MeasuredSource) else source.stressed.n_frames
    if isinstance(source, ImageSource):
        stacks = [source.stressed] + ([source.relaxed] if source.relaxed is not None else [])
        interval = frame_interval(stacks, row.frame_interval)
    run = _Run(row, settings, writer, log, source.pixel, interval, FieldResult())
    log(f"opened: {frames} frames, pixel {source.pixel * 1e6:.6g} um, method {settings.method}")
    if isinstance(source, ImageSource) and source.relaxed is None:
        source.reference = quietest_frame(source)
        log(f"frame {source.reference} pulls least and stands in for the relaxed image")
    run.spent("open", began)
    for t in range(frames):
        _one_frame(run, source, t)
    if frames > 1 and run.interval is not None and run.best is not None:
        writer.times(np.arange(frames) * run.interval)
    if run.best is not None:
        since = time.perf_counter()
        run.result.gel, run.result.gel_evidence = gel_row(
            row, settings, run.best, run.best_dipoles, source.gel, pixel=source.pixel, change=_is_change(source)
        )
        if run.result.gel["verdict"] == "contradicted":
            run.result.warn("the beads contradict the gel that was entered: see gel.csv")
        run.spent("gel", since)
        run.result.quality = {
            "method": run.best.traction.method,
            "outline": run.best.outlines.source,
            "pixel_size_um": source.pixel * 1e6,
            "lattice_um": run.best.traction.spacing * 1e6,
        }
    run.result.settle()
    return run.result


def _is_change(source: ImageSource | MeasuredSource) -> bool:
    return isinstance(source, ImageSource) and source.relaxed is None


def _open_images(row: RowValues, files: RowFiles, settings: RunSettings) -> ImageSource:
    stressed = open_frames(files.paths["stressed"])
    relaxed = open_frames(files.paths["relaxed"]) if "relaxed" in files.paths else None
    stacks = [stressed]
    if relaxed is not None:
        matching_shape(stressed, relaxed)
        stacks.append(relaxed)
    pixel = resolve_pixel_size(stacks, row.pixel)
    outlines = None
    if files.outline:
        outlines = read_outline_stack(files.outline, stressed.shape, n_frames=stressed.n_frames)
    return ImageSource(row, settings, stressed, relaxed, outlines, make_gel(row), pixel)


def _open_measured(row: RowValues, files: RowFiles, settings: RunSettings) -> MeasuredSource:
    if settings.method == "image":
        raise InputError(
            "the method 'image' needs bead images",
            code="method-needs-images",
            column=row.source,
            remedy="leave --method away or write --method bounded",
        )
    return open_measured(row, files, settings, make_gel(row))


def _one_frame(run: _Run, source: ImageSource | MeasuredSource, t: int) -> None:
    result = run.result
    since = time.perf_counter()
    if isinstance(source, ImageSource) and source.relaxed is None and source.reference == t:
        note = "this frame pulls least and is the reference that all others are measured against"
        result.fields.append({"frame": t, "status": "caution", "message": note})
        return
    try:
        if isinstance(source, MeasuredSource):
            found = source.measure(t)
            run.spent("measure", since)
        else:
            relaxed, stressed = source.reference_image(t), source.image(source.stressed, t)
            found = source.measure(t, relaxed, stressed)
            run.spent("measure", since)
            since = time.perf_counter()
            store_pictures(run.writer, found, relaxed, stressed, run.pixel)
            run.spent("pictures", since)
        since = time.perf_counter()
        _rows_of(run, source, found)
        run.spent("moments", since)
    except TfmError as error:
        place = f"{error.file}: " if error.file and error.file not in error.message else ""
        text = f"{place}{error.message}" + (f"; {error.remedy}" if error.remedy else "") + f" [{error.code}]"
        run.log(f"frame {t}: failed: {text}")
        result.fields.append(failed_field_row(text, frame=t))
        return
    run.log(f"frame {t}: measured {len(found.outlines.cells)} cells")


def _rows_of(run: _Run, source: ImageSource | MeasuredSource, found: FrameResult) -> None:
    row, traction, outlines, t = run.row, found.traction, found.outlines, found.frame
    dipoles = cell_dipoles(traction, outlines, run.pixel, pixel_size_sd=row.pixel_sd or 0.0)
    if not dipoles:
        raise MeasurementError("no cell lies inside the field", code="no-cell", remedy="check the outline's frame")
    pairs = cell_pairs(traction, dipoles, noise_energy=row.noise_energy)
    cut = cells_cut_by_edge(outlines.labels)
    general = [*found.notes, *traction.notes, *outlines.notes]
    if found.displacement is not None:
        general += [note for note in found.displacement.notes if note not in traction.notes]
    if _is_change(source):
        reference = source.reference if isinstance(source, ImageSource) else None
        general.append(f"a change against frame {reference}, the one of least pull, not a total")
    pushing = [_pushes(d) for d in dipoles]
    if all(pushing):
        general.append("the cells push outwards: are the stressed and the relaxed image swapped?")
    for dipole in dipoles:
        notes = join_notes(
            dipole.notes,
            outlines.cell_notes.get(dipole.cell, ()),
            ["the outline is cut by the edge of the image"] if dipole.cell in cut else [],
            general,
        )
        status = "caution" if notes else "ok"
        run.result.cells.append(cell_row(dipole, frame=t, time=run.time_of(t), status=status, notes=notes))
        run.result.budget.append(
            {"cell": dipole.cell, "frame": t, "variance_pNm2": {k: float(v) * 1e24 for k, v in dipole.budget.items()}}
        )
    seen = {d.cell for d in dipoles}
    lost = [cell for cell in outlines.cells if cell not in seen]
    run.result.pairs += [pair_row(pair, frame=t, notes=general) for pair in pairs]
    message = join_notes(general, [f"cell {c} is too small for the lattice and was not measured" for c in lost])
    status = "caution" if message else "ok"
    run.result.fields.append(
        field_row(found.displacement, frame=t, pixel=run.pixel, misfit=traction.misfit, status=status, message=message)
    )
    run.result.statistics.append({"frame": t, "method": traction.method, **_plain(traction.statistics)})
    store_arrays(run.writer, found)
    energy = sum(d.strain_energy for d in dipoles)
    if energy > run.best_energy:
        run.best, run.best_dipoles, run.best_energy = found, dipoles, energy


def _pushes(dipole: CellDipole) -> bool:
    sd = dipole.contractile_moment_sd
    return sd is not None and dipole.contractile_moment < -_SWAPPED * sd


def _plain(values: Any) -> Any:
    """Numbers and text that JSON holds; what is not finite becomes None."""
    if isinstance(values, dict) or hasattr(values, "items"):
        return {str(k): _plain(v) for k, v in values.items()}
    if isinstance(values, (list, tuple, np.ndarray)):
        return [_plain(v) for v in values]
    if isinstance(values, (bool, np.bool_)):
        return bool(values)
    if isinstance(values, (int, np.integer)):
        return int(values)
    if isinstance(values, (float, np.floating)):
        return float(values) if np.isfinite(values) else None
    return None if values is None else str(values)
