"""Runs: nothing lost, nothing recomputed without need, the same bytes every time."""

from __future__ import annotations

import csv
import json
import os
import random
from pathlib import Path

import pytest
from standin import make_sheet, work

from tfm.batch.problems import SheetError
from tfm.batch.run import RunOptions, RunSummary, run_sheet
from tfm.batch.settings import RunSettings
from tfm.batch.task import Outcome
from tfm.errors import InputError

TABLES = ("cells.csv", "pairs.csv", "gel.csv", "fields.csv", "columns.json")


@pytest.fixture(autouse=True)
def _restored(monkeypatch: pytest.MonkeyPatch) -> None:
    import tfm.batch.field as real

    monkeypatch.setattr(real, "measure_field", real.measure_field)
    monkeypatch.setenv("TFM_TEST_RESULTS", "")


def _run(sheet: Path, out: Path, seen: list[Outcome] | None = None, **options: object) -> RunSummary:
    settings = options.pop("settings", None)
    log = [] if seen is None else seen
    return run_sheet(
        sheet,
        out,
        settings=settings,
        options=RunOptions(**options),
        on_field=log.append,
        work=work,  # type: ignore[arg-type]
    )


def _bytes(out: Path) -> dict[str, bytes]:
    return {name: (out / name).read_bytes() for name in TABLES}


def _rows(out: Path, name: str) -> list[dict[str, str]]:
    with (out / name).open(newline="", encoding="utf-8") as stream:
        return list(csv.DictReader(stream))


def test_two_runs_give_the_same_bytes_and_the_second_computes_nothing(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, ["b", "a", "c"])
    first, second = tmp_path / "one", tmp_path / "two"
    assert _run(sheet, first).exit_code == 0
    before = _bytes(first)
    seen: list[Outcome] = []
    assert _run(sheet, first, seen).exit_code == 0
    assert [o.reused for o in seen] == [True] * 3
    assert _bytes(first) == before
    _run(sheet, second)
    assert _bytes(second) == before
    assert [r["field"] for r in _rows(first, "fields.csv")] == ["b", "a", "c"]
    assert [r["donor"] for r in _rows(first, "cells.csv")] == ["D0", "D1", "D2"]
    assert [r["condition"] for r in _rows(first, "cells.csv")] == ["group 0", "group 1", "group 0"]


def test_processes_give_the_bytes_of_one_process_in_sheet_order(tmp_path: Path) -> None:
    names = [f"slow-{i}" if i % 3 == 0 else f"f{i}" for i in range(6)]
    sheet = make_sheet(tmp_path, names)
    _run(sheet, tmp_path / "one")
    seen: list[Outcome] = []
    assert _run(sheet, tmp_path / "many", seen, workers=3).exit_code == 0
    assert _bytes(tmp_path / "one") == _bytes(tmp_path / "many")
    assert sorted(o.field for o in seen) == sorted(names)


def test_two_shards_merged_equal_one_run(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, [f"f{i}" for i in range(5)])
    _run(sheet, tmp_path / "whole")
    first = _run(sheet, tmp_path / "parts", shard=(1, 2))
    assert first.exit_code == 0
    assert len(first.mine) == 3
    rows = _rows(tmp_path / "parts", "fields.csv")
    assert [r["status"] for r in rows] == ["ok", "failed", "ok", "failed", "ok"]
    assert "not computed yet" in rows[1]["message"]
    _run(sheet, tmp_path / "parts", shard=(2, 2))
    assert _bytes(tmp_path / "whole") == _bytes(tmp_path / "parts")


def test_shards_in_folders_of_their_own_are_merged_by_copying_records(tmp_path: Path) -> None:
    import shutil

    sheet = make_sheet(tmp_path, [f"f{i}" for i in range(4)])
    _run(sheet, tmp_path / "whole")
    for i in (1, 2):
        _run(sheet, tmp_path / f"part{i}", shard=(i, 2))
        shutil.copytree(tmp_path / f"part{i}" / "fields", tmp_path / "merged" / "fields", dirs_exist_ok=True)
    seen: list[Outcome] = []
    _run(sheet, tmp_path / "merged", seen)
    assert all(o.reused for o in seen)
    assert _bytes(tmp_path / "whole") == _bytes(tmp_path / "merged")


def _touch(folder: Path) -> None:
    for path in (folder / "img").iterdir():
        os.utime(path, (1, 1))


def _move(folder: Path) -> None:
    (folder / "img").rename(folder / "elsewhere")
    sheet = folder / "sheet.csv"
    sheet.write_text(sheet.read_text().replace("img/", "elsewhere/"))


def _reorder(folder: Path) -> None:
    sheet = folder / "sheet.csv"
    head, *rows = sheet.read_text().splitlines()
    random.Random(1).shuffle(rows)
    sheet.write_text("\n".join([head, *rows]) + "\n")


def _rename_group(folder: Path) -> None:
    sheet = folder / "sheet.csv"
    sheet.write_text(sheet.read_text().replace("group 0", "control"))


@pytest.mark.parametrize("change", [_touch, _move, _reorder, _rename_group])
def test_what_does_not_enter_a_number_recomputes_nothing(tmp_path: Path, change: object) -> None:
    sheet = make_sheet(tmp_path, ["a", "b", "c"])
    _run(sheet, tmp_path / "out")
    change(tmp_path)  # type: ignore[operator]
    seen: list[Outcome] = []
    _run(sheet, tmp_path / "out", seen, workers=2)
    assert all(o.reused for o in seen)
    if change is _rename_group:
        assert {r["condition"] for r in _rows(tmp_path / "out", "cells.csv")} == {"control", "group 1"}


def test_one_pixel_recomputes_that_field_and_no_other(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, ["a", "b", "c"])
    _run(sheet, tmp_path / "out")
    path = tmp_path / "img" / "1_s.tif"
    data = bytearray(path.read_bytes())
    data[-1] ^= 1
    path.write_bytes(data)
    seen: list[Outcome] = []
    _run(sheet, tmp_path / "out", seen)
    assert {o.field: o.reused for o in seen} == {"a": True, "b": False, "c": True}
    assert seen[1].reasons == ("input file stressed: its content changed",)


def test_a_setting_or_a_sheet_value_recomputes_and_is_named(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, ["a"])
    _run(sheet, tmp_path / "out")
    seen: list[Outcome] = []
    _run(sheet, tmp_path / "out", seen, settings=RunSettings(method="bounded"))
    assert seen[0].reasons == ("setting method: auto -> bounded",)
    make_sheet(tmp_path, ["a"], modulus="6 kPa")
    _run(sheet, tmp_path / "out", seen, settings=RunSettings(method="bounded"))
    assert seen[1].reasons == ("sheet value youngs_modulus: 5000.0 -> 6000.0",)
    _run(sheet, tmp_path / "out", seen, redo=True, settings=RunSettings(method="bounded"))
    assert seen[2].reasons == ("asked for by --redo",)


def test_the_algorithm_version_is_part_of_the_key(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    sheet = make_sheet(tmp_path, ["a"])
    _run(sheet, tmp_path / "out")
    monkeypatch.setattr("tfm.batch.key.ALGORITHM_VERSION", "next")
    monkeypatch.setattr("tfm.batch.assemble.ALGORITHM_VERSION", "next")
    seen: list[Outcome] = []
    _run(sheet, tmp_path / "out", seen)
    assert seen[0].reasons[0].startswith("algorithm version")


@pytest.mark.parametrize("harm", ["cut arrays", "flip arrays", "remove arrays", "cut record", "edit record"])
def test_a_damaged_result_is_noticed_and_made_again(tmp_path: Path, harm: str) -> None:
    sheet = make_sheet(tmp_path, ["a", "b"])
    out = tmp_path / "out"
    _run(sheet, out)
    before = _bytes(out)
    path = out / "fields" / ("a.nc" if "arrays" in harm else "a.json")
    data = path.read_bytes()
    if harm.startswith("cut"):
        path.write_bytes(data[: len(data) // 2])
    elif harm == "flip arrays":
        path.write_bytes(data[:-5] + bytes([data[-5] ^ 1]) + data[-4:])
    elif harm == "edit record":
        path.write_text(path.read_text().replace('"x_um": 1.5', '"x_um": 9.5'))
    else:
        path.unlink()
    seen: list[Outcome] = []
    _run(sheet, out, seen)
    assert {o.field: o.reused for o in seen} == {"a": False, "b": True}
    assert _bytes(out) == before


def test_a_bad_field_does_not_stop_the_others_and_all_accounts_agree(tmp_path: Path) -> None:
    names = ["a", "bad-1", "c", "bug-1", "bugonce-1", "f"]
    sheet = make_sheet(tmp_path, names)
    (tmp_path / "img" / "5_r.tif").unlink()
    seen: list[Outcome] = []
    out = tmp_path / "out"
    summary = _run(sheet, out, seen)
    assert summary.exit_code == 1
    status = {r["field"]: r["status"] for r in _rows(out, "fields.csv")}
    assert status == {"a": "ok", "bad-1": "failed", "c": "ok", "bug-1": "failed", "bugonce-1": "ok", "f": "failed"}
    run = json.loads((out / "run.json").read_text())
    assert {f["field"]: f["status"] for f in run["fields"]} == status
    assert run["exit_code"] == 1
    assert run["counts"] == {"ok": 3, "caution": 0, "failed": 3}
    by_name = {o.field: o for o in seen}
    assert by_name["bug-1"].attempts == 2
    assert by_name["bug-1"].code == "fault"
    assert by_name["bugonce-1"].attempts == 2
    assert by_name["bad-1"].attempts == 1
    messages = {r["field"]: r["message"] for r in _rows(out, "fields.csv")}
    assert "no bead is in focus; focus on the beads" in messages["bad-1"]
    assert "0_r" not in messages["f"]
    assert "img/5_r.tif" in messages["f"]
    # A measured failure is a result; a fault, or a file that was missing, is tried again.
    again: list[Outcome] = []
    _run(sheet, out, again)
    assert {o.field for o in again if not o.reused} == {"bug-1", "f"}


def test_a_field_that_disappears_and_comes_back_keeps_its_result(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, ["a", "b"])
    out = tmp_path / "out"
    _run(sheet, out)
    before = _bytes(out)
    path = tmp_path / "img" / "0_s.tif"
    path.rename(tmp_path / "away.tif")
    assert _run(sheet, out).exit_code == 1
    assert _rows(out, "fields.csv")[0]["status"] == "failed"
    assert [r["field"] for r in _rows(out, "cells.csv")] == ["b"]
    (tmp_path / "away.tif").rename(path)
    seen: list[Outcome] = []
    assert _run(sheet, out, seen).exit_code == 0
    assert all(o.reused for o in seen)
    assert _bytes(out) == before


def test_no_good_row_computes_nothing(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, ["a", "b"])
    for path in (tmp_path / "img").glob("*_s.tif"):
        path.unlink()
    with pytest.raises(SheetError) as caught:
        _run(sheet, tmp_path / "out")
    assert [p.code for p in caught.value.problems] == ["missing-file"] * 2
    assert not (tmp_path / "out").exists()


BAD_PATHS = [
    ("/etc/hostname", "absolute-path"),
    ("C:\\beads.tif", "absolute-path"),
    ("~/beads.tif", "absolute-path"),
    ("../secret.tif", "path-outside"),
    ("img/../../secret.tif", "path-outside"),
    ("link.tif", "path-outside"),
    ("loop.tif", "not-a-path"),
    ("file:///etc/hostname", "not-a-path"),
    ("https://somewhere/beads.tif", "not-a-path"),
    ("img", "not-a-file"),
    ("pipe.tif", "not-a-file"),
    ("empty.tif", "empty-file"),
    ("img\\0_s.tif", "missing-file"),
    ("x" * 300 + ".tif", "not-a-path"),
]


@pytest.mark.parametrize(("text", "code"), BAD_PATHS)
def test_paths_lead_to_files_below_the_sheet_or_are_refused(tmp_path: Path, text: str, code: str) -> None:
    folder = tmp_path / "study"
    sheet = make_sheet(folder, ["good", "tricky"])
    (tmp_path / "secret.tif").write_bytes((folder / "img" / "0_s.tif").read_bytes())
    (folder / "link.tif").symlink_to(tmp_path / "secret.tif")
    (folder / "loop.tif").symlink_to(folder / "loop.tif")
    (folder / "empty.tif").touch()
    os.mkfifo(folder / "pipe.tif")
    sheet.write_text(sheet.read_text().replace("img/1_s.tif", text))
    seen: list[Outcome] = []
    assert _run(sheet, tmp_path / "out", seen).exit_code == 1
    assert {o.field: o.code for o in seen} == {"good": "", "tricky": code}
    assert len([r for r in _rows(tmp_path / "out", "cells.csv") if r["field"] == "tricky"]) == 0


def test_a_wider_root_lets_files_lie_elsewhere(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path / "study", ["a"])
    (tmp_path / "study" / "img").rename(tmp_path / "img")
    sheet.write_text(sheet.read_text().replace("img/", "../img/"))
    assert _run(sheet, tmp_path / "out", root=tmp_path).exit_code == 0


NASTY = [
    "../up",
    "a/b",
    "con",
    ".hidden",
    "A",
    "a",
    "<script>alert(1)</script>",
    "=1+1",
    "\u00e9t\u00e9",
    "x" * 200,
    "t~1",
    "..",
    "%2E",
]


def test_names_never_become_paths(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path / "study", NASTY)
    out = tmp_path / "study" / "out"
    assert _run(sheet, out).exit_code == 0
    assert [r["field"] for r in _rows(out, "fields.csv")] == NASTY
    made = sorted(p.name for p in (out / "fields").iterdir())
    assert len(made) == 2 * len(NASTY)
    assert len({name.casefold() for name in made}) == len(made)
    assert {p.name for p in tmp_path.iterdir()} == {"study"}
    assert {p.name for p in (tmp_path / "study").iterdir()} == {"sheet.csv", "img", "out"}


def test_results_never_overwrite_a_users_own_files(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, ["a"])
    own = tmp_path / "cells.csv"
    own.write_text("mine")
    with pytest.raises(InputError, match="choose another folder"):
        _run(sheet, tmp_path)
    sheet.rename(own)
    with pytest.raises(InputError, match="would be overwritten"):
        _run(own, tmp_path)
    with pytest.raises(InputError, match="is a file"):
        _run(own, own)


def test_every_row_of_the_sheet_has_a_row_in_an_interrupted_run(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, ["a", "b", "c"])
    out = tmp_path / "out"

    def stop(outcome: Outcome) -> None:
        if outcome.field == "b":
            raise KeyboardInterrupt

    summary = run_sheet(sheet, out, on_field=stop, work=work)
    assert summary.exit_code == 130
    assert [r["status"] for r in _rows(out, "fields.csv")] == ["ok", "ok", "failed"]
    assert json.loads((out / "run.json").read_text())["unfinished"] == 1
    seen: list[Outcome] = []
    assert _run(sheet, out, seen).exit_code == 0
    assert [o.reused for o in seen] == [True, True, False]
