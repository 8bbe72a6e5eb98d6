"""The report as files: one row per field of the sheet, everything typed by users escaped, the same bytes twice."""

from __future__ import annotations

import re
from collections.abc import Callable
from html.parser import HTMLParser
from pathlib import Path

import h5py
import pytest

from tfm.errors import InputError
from tfm.report import build_report


class _Page(HTMLParser):
    """Collects what a browser would fetch, run and read out."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.sources: list[str] = []
        self.alts: list[str] = []
        self.scripts = 0
        self.rows = 0
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        found = dict(attrs)
        self.scripts += tag == "script"
        self.rows += tag == "tr" and (found.get("id") or "").startswith("row-")
        for key in ("src", "href"):
            if tag in ("img", "script", "link") and found.get(key):
                self.sources.append(str(found[key]))
        if tag == "img":
            self.alts.append(found.get("alt") or "")


def _read(path: Path) -> _Page:
    return _Page(path.read_text(encoding="utf-8"))


def test_one_row_per_field_and_local_files_only(built: Path) -> None:
    page = _read(built / "report.html")
    assert page.rows == 9
    assert page.scripts == 2  # the data and the script of the page: none came in through a field's name
    for source in page.sources:
        assert "//" not in source
        assert (built / source).exists()
    assert all(re.search(r"\d", alt) for alt in page.alts)


def test_every_field_has_a_page_whose_pictures_exist(built: Path) -> None:
    pages = sorted(built.glob("figures/*/index.html"))
    assert len(pages) == 9
    for path in pages:
        page = _read(path)
        assert page.scripts == 0
        for source in page.sources:
            assert (path.parent / source).exists(), source
        assert all(re.search(r"\d", alt) for alt in page.alts)


def test_names_are_escaped(built: Path) -> None:
    for path in [built / "report.html", *built.glob("figures/*/index.html")]:
        assert "<script>alert(1)" not in path.read_text(encoding="utf-8")


def test_vector_files_keep_text_as_text_and_repeat_byte_for_byte(
    built: Path, make_folder: Callable[..., Path], tmp_path: Path
) -> None:
    again = make_folder(tmp_path / "results", fields=3, bad=0)  # the same first three fields
    build_report(again)
    files = sorted(p.relative_to(again) for p in again.glob("figures/*/*.svg"))
    assert len(files) >= 11
    for name in files:
        assert (built / name).read_bytes() == (again / name).read_bytes(), name
    maps = next(built.glob("figures/plate-001/maps.svg")).read_text(encoding="utf-8")
    assert ">Displacement of the gel</text>" in maps
    assert "displacement, µm" in maps


def test_unchanged_pictures_are_kept_and_changed_ones_drawn_anew(
    make_folder: Callable[..., Path], tmp_path: Path
) -> None:
    root = make_folder(tmp_path / "results", fields=2, bad=0)
    build_report(root)
    stamps = {p: p.stat().st_mtime_ns for p in root.glob("figures/*/maps.svg")}
    cells = root / "cells.csv"
    cells.write_text(re.sub(r"(?m)^(plate-001,.*?),ok,", r"\1,caution,", cells.read_text()))
    build_report(root)
    changed = {p.parent.name for p, old in stamps.items() if p.stat().st_mtime_ns != old}
    assert changed == {"plate-001"}


def test_a_folder_without_arrays_still_gives_a_report(make_folder: Callable[..., Path], tmp_path: Path) -> None:
    root = make_folder(tmp_path / "results", fields=4, bad=1, arrays=False)
    page = _read(build_report(root))
    assert page.rows == 4


def test_no_results_is_one_line(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"fields\.csv.*no such table"):
        build_report(tmp_path)


def test_a_cell_without_outline_is_listed_although_its_field_is_ok(
    make_folder: Callable[..., Path], tmp_path: Path
) -> None:
    # The arrays hold two cells that pull; the second outline is taken away, as by someone who overlooked a cell.
    root = make_folder(tmp_path / "results", fields=3, bad=0)
    with h5py.File(root / "fields" / "f2.nc", "r+") as file:
        labels = file["labels"][...]
        traction = file["traction_displacement"][...]
        half = traction.shape[-1] // 2
        labels[..., half:][labels[..., half:] == 2] = 0
        traction[..., half:] = 0
        file["labels"][...] = labels
        file["traction_displacement"][...] = traction
    text = build_report(root).read_text(encoding="utf-8")
    look = text[text.index('id="look"') : text.index('id="by"')]
    assert "plate-003" in look
    assert "unexplained ground" in look
    assert "plate-001" not in look
    # The bytes are no longer those of the record, and the page says so.
    assert "the outputs of 2 of these were verified" in text


def test_several_processes_draw_the_same(make_folder: Callable[..., Path], tmp_path: Path) -> None:
    one, two = (make_folder(tmp_path / name / "results", fields=8, arrays=False) for name in ("one", "two"))
    build_report(one)
    build_report(two, workers=2)
    for path in sorted(one.glob("figures/**/*.*")):
        assert path.read_bytes() == (two / path.relative_to(one)).read_bytes()
    assert (one / "report.html").read_bytes() == (two / "report.html").read_bytes()


@pytest.mark.parametrize(("changed", "good"), [(False, True), (True, False)])
def test_all_good_is_said_only_when_every_output_is_proven(
    make_folder: Callable[..., Path], tmp_path: Path, changed: bool, good: bool
) -> None:
    root = make_folder(tmp_path / "results", fields=3, bad=0)
    if changed:  # one bit that no reader of the file would notice
        with h5py.File(root / "fields" / "f0.nc", "r+") as file:
            file["displacement"].attrs["remark"] = "touched"
    assert ("All good: 3 of 3" in build_report(root).read_text(encoding="utf-8")) is good


@pytest.mark.parametrize(
    "lost",
    [
        ("relaxed_image", "stressed_image", "residual_image"),  # a displacement field measured elsewhere
        (
            "displacement",
            "displacement_precision",
            "relaxed_image",
            "stressed_image",
            "residual_image",
        ),  # a traction field
        ("traction", "traction_displacement", "labels"),
        ("labels",),
    ],
)
def test_draws_what_is_there(make_folder: Callable[..., Path], tmp_path: Path, lost: tuple[str, ...]) -> None:
    root = make_folder(tmp_path / "results", fields=1, bad=0)
    with h5py.File(root / "fields" / "f0.nc", "r+") as file:
        for name in lost:
            del file[name]
    page = _read(build_report(root).parent / "figures" / "plate-001" / "index.html")
    assert len([s for s in page.sources if s.endswith("maps.svg")]) == 1
    assert (root / "figures" / "plate-001" / "thumb.webp").exists()
