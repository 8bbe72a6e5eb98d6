"""All picture files of one field, drawn once per state of its data: any worker can do this while the run goes on."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from dataclasses import field as dataclass_field
from pathlib import Path
from typing import Any

from matplotlib.figure import Figure

from tfm.batch.atomic import file_sha256
from tfm.report.checks import beads_figure, residual_figure, unexplained_ground
from tfm.report.fielddata import FieldArrays, read_arrays
from tfm.report.figures import maps_figure, rows_of_frame
from tfm.report.files import svg_text, thumbnail, write_bytes
from tfm.report.numbers import numbers_figure
from tfm.report.results import FieldResult, number
from tfm.report.series import series_figure
from tfm.report.style import drawing
from tfm.report.words import alt_maps, cell_sentence, plain

__all__ = ["DRAWING_VERSION", "Picture", "Pictures", "draw_field", "strongest_frame"]

#: Raise when figures change, so that pictures of earlier versions are drawn anew.
DRAWING_VERSION = 7


@dataclass(frozen=True)
class Picture:
    """One vector file of a field, relative to the field's folder, with what it shows."""

    file: str
    title: str
    caption: str
    alt: str
    width: int
    height: int


@dataclass(frozen=True)
class Pictures:
    """What was drawn of a field: the frame shown, vector files, the thumbnail's name, the arrays' hash.

    ``measures`` are numbers that only the arrays tell, by the names of :data:`tfm.report.triage.LIMITS`.
    """

    frame: int
    pictures: tuple[Picture, ...]
    thumb: str | None
    sha256: str
    measures: Mapping[str, float] = dataclass_field(default_factory=dict)


def strongest_frame(field: FieldResult) -> int:
    """The frame with the largest total of contractile moments: the one that pictures show."""
    totals: dict[int, float] = {}
    for row in field.cells:
        value = number(row, "contractile_moment_pNm")
        if value is not None:
            frame = int(number(row, "frame") or 0)
            totals[frame] = totals.get(frame, 0.0) + abs(value)
    return max(totals, key=lambda f: (totals[f], -f)) if totals else 0


def _state(field: FieldResult, digest: str) -> str:
    """A hash of everything that the pictures depend on."""
    rows = [[dict(r) for r in t] for t in (field.frames, field.cells, field.pairs)]
    about = [
        DRAWING_VERSION,
        field.name,
        digest,
        rows,
        dict(field.gel or {}),
        field.record.get("budget"),
        field.record.get("gel_evidence"),
        field.change_only,
    ]
    return hashlib.sha256(json.dumps(about, sort_keys=True, default=str).encode()).hexdigest()


_CAPTIONS = {
    "maps": (
        "What moved, what pulled, where the moment is made",
        "Arrows are measured vectors (not every one), coloured by size and drawn to the scale of the bar in the lower "
        "left corner; dots are vectors below twice their noise. In the right map purple pulls towards the cell's "
        "centroid; orange, ringed by dots, pushes away. Bars with arrow heads are the principal axes: heads point "
        "inwards along an axis that contracts, and the shaded tips are 95 % regions of angle and size.",
    ),
    "frames": (
        "The series at a glance",
        "Traction in evenly spaced frames, all to one colour scale and one scale of the principal axes. The number is "
        "the contractile moment of all cells of the frame together.",
    ),
    "beads": (
        "Relaxed and stressed beads on top of each other",
        "Orange: relaxed. Blue: stressed. White: both agree. Left and middle: the quietest ground before and after the "
        "drift is taken out; if the middle is not white, distrust this field. Right: the ground that moved most.",
    ),
    "residual": (
        "What the traction does not explain",
        "Observed minus predicted. A good field is even noise without structure. Structure outside the outline means a "
        "wrong gel or a cell that is not outlined. Vectors are means over windows and blurred where the gel moves "
        "steeply under a cell; the picture on the right is not: structure there is traction finer than the lattice, or "
        "lost focus.",
    ),
    "numbers": (
        "Numbers behind the picture",
        "As far as this field has them: moment over time with its 95 % band, interaction energies of pairs, the error "
        "budget, and what the beads say about Poisson ratio and thickness.",
    ),
}


def _alt_numbers(field: FieldResult, frame: int) -> str:
    parts = [
        f"Cells {r['cell_a']} and {r['cell_b']}: interaction energy {plain(number(r, 'energy_fJ'))} fJ."
        for r in rows_of_frame(field.pairs, frame)[:6]
    ]
    gel = field.gel
    if gel is not None and number(gel, "poisson_best") is not None:
        best, low, high, entered = (plain(number(gel, f"poisson{k}")) for k in ("_best", "_low", "_high", ""))
        parts.append(
            f"Poisson ratio from the beads {best}, 95 % interval {low} to {high}; "
            f"entered {entered}: {gel.get('verdict')}."
        )
    parts += [cell_sentence(r, change=field.change_only) for r in rows_of_frame(field.cells, frame)]
    return " ".join(parts)


def _alt(name: str, field: FieldResult, frame: int) -> str:
    """Alt text of a figure, with its numbers."""
    row = next(iter(rows_of_frame(field.frames, frame)), {})
    if name == "maps":
        return alt_maps(field, rows_of_frame(field.cells, frame))
    if name == "frames":
        totals = [
            f"frame {r.get('frame')}, cell {r.get('cell')}: {plain(number(r, 'contractile_moment_pNm'))} pN m"
            for r in field.cells
        ]
        return "Traction in evenly spaced frames of the series. " + "; ".join(totals[:24])
    if name == "beads":
        drift = f"{plain(number(row, 'drift_x_px'))} px in x and {plain(number(row, 'drift_y_px'))} px in y"
        return f"Relaxed over stressed beads, before and after a drift of {drift}, and where the gel moved most."
    if name == "residual":
        misfit = plain(number(row, "misfit"))
        return f"Maps of observed minus predicted displacement in x and y. Misfit {misfit}; 1 is expected."
    return _alt_numbers(field, frame)


_FIGURES: dict[str, Callable[[FieldResult, FieldArrays], Figure | None]] = {
    "maps": maps_figure,
    "frames": series_figure,
    "beads": beads_figure,
    "residual": residual_figure,
    "numbers": numbers_figure,
}


def draw_field(root: Path, field: FieldResult, *, redo: bool = False) -> Pictures:
    """Draw a field's figures below ``root/figures/`` unless they are there for the very same data.

    A field that cannot be drawn is never an error of the run: it has no arrays, and then it has no pictures.
    """
    folder = root / "figures" / field.folder
    digest = file_sha256(field.data) if field.data is not None else ""
    state, stamp = _state(field, digest), folder / "drawn.json"
    if not redo and stamp.exists():
        old: dict[str, Any] = json.loads(stamp.read_text(encoding="utf-8"))
        if old.get("state") == state and all((folder / p["file"]).exists() for p in old["pictures"]):
            drawn_before = tuple(Picture(**p) for p in old["pictures"])
            return Pictures(old["frame"], drawn_before, old["thumb"], digest, old["measures"])
    frame = strongest_frame(field)
    arrays = read_arrays(field.data, frame=frame) if field.data is not None else FieldArrays(frame=frame, frames=1)
    pictures = []
    with drawing():
        for name, make in _FIGURES.items():
            figure = make(field, arrays)
            if figure is None:
                continue
            title, caption = _CAPTIONS[name]
            write_bytes(folder / f"{name}.svg", svg_text(figure, title=f"{field.name}: {title}").encode())
            width, height = (round(v * 100) for v in figure.get_size_inches())
            pictures.append(Picture(f"{name}.svg", title, caption, _alt(name, field, frame), width, height))
    small = thumbnail(arrays)
    if small is not None:
        write_bytes(folder / "thumb.webp", small)
    share = unexplained_ground(field, arrays)
    measures = {} if share is None else {"unexplained ground": round(share, 3)}
    drawn = Pictures(frame, tuple(pictures), "thumb.webp" if small is not None else None, digest, measures)
    about = {
        "state": state,
        "frame": frame,
        "thumb": drawn.thumb,
        "measures": measures,
        "pictures": [vars(p) for p in pictures],
    }
    write_bytes(stamp, (json.dumps(about, indent=1) + "\n").encode())
    return drawn
