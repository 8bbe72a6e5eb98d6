"""The files behind one row of the sheet: where they are, and what their headers tell before anything is computed."""

from __future__ import annotations

import os
import re
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, TypeVar

from tfm.batch.problems import Problem, readable
from tfm.batch.settings import RowValues, RunSettings
from tfm.errors import InputError, TfmError

if TYPE_CHECKING:
    from tfm.images import BeadStack

__all__ = ["RowFiles", "check_row", "frame_interval", "locate", "resolve_path"]

T = TypeVar("T")
_PATHS = ("stressed", "relaxed", "displacement", "traction", "outline")
_ABSOLUTE = re.compile(r"^(?:[/\\]|[A-Za-z]:|~)")


@dataclass(frozen=True)
class RowFiles:
    """Files of one row.

    Attributes
    ----------
    paths
        Role (``stressed``, ``relaxed``, ``displacement``, ``traction``, ``outline``) -> file.
    outline
        The outline column as the images room wants it, with a full path; empty when there is none.
    """

    paths: dict[str, Path]
    outline: str = ""


def resolve_path(text: str, folder: Path, root: Path) -> Path:
    """The file that a cell of the sheet names.

    Parameters
    ----------
    text
        As typed, relative to the sheet.
    folder
        The sheet's folder.
    root
        Folder that the file, with all symbolic links followed, has to lie in.

    Raises
    ------
    InputError
        ``absolute-path``, ``path-outside``, ``not-a-path``, ``missing-file``, ``not-a-file``, ``empty-file`` or
        ``unreadable-file``.
    """
    shown = readable(text)
    if "://" in text:
        raise InputError(
            f"'{shown}' is an address, not a file", code="not-a-path", remedy="copy the file beside the sheet"
        )
    if _ABSOLUTE.match(text):
        raise InputError(
            f"'{shown}' is not relative to the sheet",
            code="absolute-path",
            remedy="write the path from the sheet's folder",
        )
    try:
        path = (folder / text).resolve()
        inside = path.is_relative_to(root.resolve())
        exists = path.exists()
    except (OSError, ValueError, RuntimeError) as error:  # name too long, loop of links
        raise InputError(
            f"'{shown}' cannot be followed ({error})", code="not-a-path", remedy="check the path"
        ) from error
    if not inside:
        raise InputError(
            f"'{shown}' leads out of the folder {readable(str(root))}",
            code="path-outside",
            remedy="move the file there, or name the common folder with --root",
        )
    if not exists:
        hint = "write / instead of \\ between folders" if "\\" in text else "check the name and its folder"
        raise InputError(f"there is no file '{shown}'", code="missing-file", remedy=hint)
    if not path.is_file():
        raise InputError(f"'{shown}' is a folder, pipe or device", code="not-a-file", remedy="name the file itself")
    if path.stat().st_size == 0:
        raise InputError(f"'{shown}' is empty", code="empty-file", remedy="copy it again from the microscope")
    if not os.access(path, os.R_OK):
        raise InputError(
            f"'{shown}' may not be read", code="unreadable-file", remedy="change the permissions of the file"
        )
    return path


def locate(row: RowValues, folder: Path, root: Path) -> RowFiles:
    """All files of a row.

    Raises
    ------
    InputError
        With the column filled in.
    """
    paths: dict[str, Path] = {}
    outline = ""
    for column in _PATHS:
        text = getattr(row, column)
        if not text or (column == "relaxed" and text == "quietest"):
            continue
        automatic = column == "outline" and text.startswith("auto:")
        try:
            paths[column] = resolve_path(text.removeprefix("auto:").strip() if automatic else text, folder, root)
        except TfmError as error:
            raise error.at(column=column) from error
        if column == "outline":
            outline = f"auto:{paths[column]}" if automatic else str(paths[column])
    return RowFiles(paths, outline)


class _Checker:
    """Collects the problems of one row: what fails is said, what can still be checked is checked."""

    def __init__(self, row: RowValues, sheet: str, folder: Path, root: Path) -> None:
        self.row, self.sheet, self.folder, self.root = row, sheet, folder, root
        self.problems: list[Problem] = []

    def attempt(self, column: str, action: Callable[[], T]) -> T | None:
        try:
            return action()
        except TfmError as error:
            self.say(error, column)
            return None

    def say(self, error: TfmError, column: str) -> None:
        value = readable(str(getattr(self.row, column, "") or ""))
        place = error.column if hasattr(self.row, error.column or " ") else column
        shown = error.at()
        # The message names the file as the user typed it, not where it lies on this machine.
        shown.file = str(getattr(self.row, column, "")) if error.file and Path(error.file).is_absolute() else error.file
        problem = Problem.from_error(
            shown, file=self.sheet, row=self.row.row, column=place, value=value, field=readable(self.row.field)
        )
        if str(problem) not in map(str, self.problems):
            self.problems.append(problem)

    def refuse(self, column: str, message: str, remedy: str, code: str) -> None:
        self.say(InputError(message, code=code, remedy=remedy), column)

    def path(self, column: str) -> Path | None:
        text = getattr(self.row, column)
        if column == "outline":
            text = text.removeprefix("auto:").strip()
        return self.attempt(column, lambda: resolve_path(text, self.folder, self.root))


def _check_images(check: _Checker) -> None:
    from tfm.images import matching_shape, open_frames, resolve_pixel_size

    row = check.row
    found: dict[str, BeadStack] = {}
    for column in ("stressed", "relaxed"):
        if column == "relaxed" and row.relaxed == "quietest":
            continue
        path = check.path(column)
        stack = check.attempt(column, lambda p=path: open_frames(p)) if path else None  # type: ignore[misc]
        if stack is not None:
            found[column] = stack
    stressed, relaxed = found.get("stressed"), found.get("relaxed")
    for column, stack in found.items():
        if row.bead_channel is not None and row.bead_channel >= stack.n_channels:
            check.refuse(
                "bead_channel",
                f"{column} has {stack.n_channels} channels and channel {row.bead_channel} is asked for",
                "count channels from 0",
                "no-such-channel",
            )
        elif row.bead_channel is None and stack.n_channels > 1:
            check.refuse(
                "bead_channel",
                f"{column} has {stack.n_channels} channels and the sheet does not say which shows the beads",
                "fill in bead_channel, counted from 0",
                "which-channel",
            )
        if isinstance(row.z, int) and row.z >= stack.n_planes > 1:
            check.refuse(
                "z",
                f"{column} has {stack.n_planes} planes and plane {row.z} is asked for",
                "count planes from 0",
                "no-such-plane",
            )
    if stressed is not None and relaxed is not None:
        check.attempt("relaxed", lambda: matching_shape(stressed, relaxed))
        if relaxed.n_frames not in (1, stressed.n_frames):
            check.refuse(
                "relaxed",
                f"relaxed has {relaxed.n_frames} frames and stressed {stressed.n_frames}",
                "give one relaxed frame, or one per stressed frame",
                "frame-count",
            )
    if stressed is not None and row.relaxed == "quietest" and stressed.n_frames < 2:
        check.refuse(
            "relaxed", "quietest needs a time series and stressed has one frame", "name a relaxed image", "frame-count"
        )
    if found:
        check.attempt("pixel", lambda: resolve_pixel_size(list(found.values()), row.pixel))
        check.attempt("frame_interval", lambda: frame_interval(list(found.values()), row.frame_interval))
    outline = check.path("outline") if row.outline else None
    if outline is not None and stressed is not None:
        _check_outline(check, outline, stressed)


def _check_outline(check: _Checker, outline: Path, stressed: BeadStack) -> None:
    from tfm.images import open_frames, read_outline_stack

    automatic = check.row.outline.startswith("auto:")
    with outline.open("rb") as stream:
        tiff = stream.read(4) in (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")
    if not (automatic or tiff):  # polygons and regions are small files: read them whole
        check.attempt("outline", lambda: read_outline_stack(str(outline), stressed.shape, n_frames=stressed.n_frames))
        return
    labels = check.attempt("outline", lambda: open_frames(outline, labels=not automatic))
    if labels is None:
        return
    if labels.shape != stressed.shape:
        check.refuse(
            "outline",
            f"the outline has {labels.shape[1]} x {labels.shape[0]} pixels and the bead image "
            f"{stressed.shape[1]} x {stressed.shape[0]}",
            "draw the outline on the bead image's own frame",
            "outline-shape",
        )
    if labels.n_frames not in (1, stressed.n_frames):
        check.refuse(
            "outline",
            f"the outline has {labels.n_frames} frames and the bead images {stressed.n_frames}",
            "give one label image, or one per stressed frame",
            "outline-frames",
        )


def frame_interval(stacks: list[BeadStack], sheet_value: float | None) -> float | None:
    """Seconds between frames: from the file, else from the sheet; disagreement above 1 % is refused."""
    stated = [s.frame_interval for s in stacks if s.n_frames > 1 and s.frame_interval]
    if stated and sheet_value is not None and abs(stated[0] - sheet_value) > 0.01 * sheet_value:
        raise InputError(
            f"the file says {stated[0]:g} s between frames and the sheet {sheet_value:g} s",
            code="interval-conflict",
            column="frame_interval",
            remedy="correct one of them, or empty the cell of the sheet",
        )
    return stated[0] if stated else sheet_value


def check_row(
    row: RowValues, *, sheet: str, folder: Path, root: Path, settings: RunSettings | None = None
) -> list[Problem]:
    """Everything that the headers of a row's files show to be wrong; reads no pixels of bead images."""
    check = _Checker(row, sheet, folder, root)
    if row.source == "images":
        _check_images(check)
        return check.problems
    if settings is not None and settings.method == "image":
        check.refuse(
            row.source,
            "the method 'image' needs bead images and this row starts from a measured field",
            "leave --method away or write --method bounded",
            "method-needs-images",
        )
    path = check.path(row.source)
    if row.outline and row.pixel is None:
        check.refuse(
            "pixel", "an outline in pixels needs the size of a pixel", "fill in for instance '0.2 um'", "no-pixel-size"
        )
    if row.outline:
        check.path("outline")
    if path is not None:
        from tfm.batch.measured import check_measured

        check.attempt(row.source, lambda: check_measured(path, row.source))
    return check.problems
