"""The corpus of bad images and outlines through whole runs: good rows unchanged, bad ones failed with a code."""

from __future__ import annotations

import csv
import importlib.util
import sys
from pathlib import Path

import numpy as np
import pytest
import tifffile
from standin import make_sheet, work

from tfm.batch.run import run_sheet
from tfm.batch.settings import RunSettings
from tfm.batch.task import Outcome, Task, execute

CORPUS = Path(__file__).parents[1] / "images" / "corpus.py"
_SPEC = importlib.util.spec_from_file_location("tfm_bad_images_for_batch", CORPUS)
assert _SPEC is not None
assert _SPEC.loader is not None
corpus = importlib.util.module_from_spec(_SPEC)
sys.modules["tfm_bad_images_for_batch"] = corpus
_SPEC.loader.exec_module(corpus)


#: Codes that a whole run may give instead: it sees a path before the file, and two images before their pixels.
ALSO = ("not-a-path", "shape-mismatch")


def _code(message: str) -> str:
    return message.rsplit("[", 1)[-1].rstrip("]")


def _work(task: Task) -> Outcome:
    """The good row is measured by the stand-in, the bad ones by the real rooms."""
    return work(task) if task.row.field == "good" else execute(task)


@pytest.mark.parametrize("column", ["stressed", "relaxed", "outline"])
def test_bad_files_fail_alone(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, column: str) -> None:
    import tfm.batch.field as real

    sheet = make_sheet(tmp_path, ["good"])
    head, good = sheet.read_text().splitlines()
    rows, codes = [], {"good": ""}
    for i, bad in enumerate(corpus.OUTLINES if column == "outline" else corpus.IMAGES):
        folder = tmp_path / f"bad{i}"
        folder.mkdir()
        given = str(bad.make(folder))
        plain = given.removeprefix("auto:")
        if "\0" in given or not plain.startswith(f"{tmp_path}"):
            continue  # what a sheet cannot hold, or what is refused as text
        tifffile.imwrite(folder / "fine.tif", corpus.GREY, photometric="minisblack")
        cells = dict.fromkeys(("stressed", "relaxed"), f"bad{i}/fine.tif")
        cells["outline"] = ""
        cells[column] = ("auto:" if given.startswith("auto:") else "") + str(Path(plain).relative_to(tmp_path))
        name = f"{i}-{bad.name}".replace(",", " ")
        rows.append(f"{name},{cells['stressed']},{cells['relaxed']},{cells['outline']},0.2 um,5 kPa,0.45,bad,D")
        codes[name] = bad.code
    head = head.replace("relaxed,", "relaxed,outline,")
    sheet.write_text("\n".join([head, good.replace("_r.tif,", "_r.tif,,"), *rows]) + "\n")
    monkeypatch.setattr(real, "measure_field", real.measure_field)
    genuine = real.measure_field

    def choose(task: Task) -> Outcome:
        if task.row.field != "good":
            monkeypatch.setattr(real, "measure_field", genuine)
        return _work(task)

    summary = run_sheet(sheet, tmp_path / "out", settings=RunSettings(method="bounded", gel_check=False), work=choose)
    assert summary.exit_code == 1
    with (tmp_path / "out" / "fields.csv").open(newline="") as stream:
        found = {row["field"]: row for row in csv.DictReader(stream)}
    wrong = [
        f"{name}: wanted {code}, got {found[name]['status']} {found[name]['message']}"
        for name, code in codes.items()
        if code and not (found[name]["status"] == "failed" and _code(found[name]["message"]) in {code, *ALSO})
    ]
    assert wrong == []
    assert sum(_code(row["message"]) in ALSO for row in found.values()) <= 5
    assert found["good"]["status"] == "ok"
    assert len(codes) > 20
    with (tmp_path / "out" / "cells.csv").open(newline="") as stream:
        assert [row["field"] for row in csv.DictReader(stream)] == ["good"]
    assert all("Traceback" not in row["message"] and "\n" not in row["message"] for row in found.values())
    assert not any(np.isfinite(float(row["vectors"] or "nan")) for name, row in found.items() if name != "good")
