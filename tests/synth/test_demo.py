"""The committed demo is complete, small, readable without extras, and exactly what the code writes."""

from __future__ import annotations

import csv
import sys
import zipfile
from pathlib import Path

import numpy as np
import pytest
import roifile
import tifffile

from tfm.synth import demo

DEMO = Path(__file__).parents[2] / "data_demo"


def rows(name):
    with (DEMO / name).open(encoding="utf-8", newline="") as handle:
        return list(csv.DictReader(handle))


def test_every_file_of_the_sheet_is_there_and_the_whole_is_small():
    for row in rows("sheet.csv"):
        for column in ("stressed", "relaxed", "outline"):
            assert (DEMO / row[column]).is_file(), row[column]
    assert sum(path.stat().st_size for path in DEMO.rglob("*")) <= 12e6
    assert "INVENTED" in (DEMO / "README.txt").read_text(encoding="utf-8")
    assert {row["field"] for row in rows("truth.csv")} == {row["field"] for row in rows("sheet.csv")}
    assert len({row["field"] for row in rows("truth.csv") if row["planted_problem"]}) == 2


def test_images_read_without_the_codecs_extra(monkeypatch):
    monkeypatch.setitem(sys.modules, "imagecodecs", None)
    for row in rows("sheet.csv"):
        with tifffile.TiffFile(DEMO / row["stressed"]) as stressed:
            image = stressed.asarray()
            assert image.dtype == np.uint16
            unit = stressed.ome_metadata if stressed.is_ome else stressed.imagej_metadata["unit"]
            assert "um" in unit
        assert image.shape[-2:] == tifffile.imread(DEMO / row["relaxed"]).shape


def test_outlines_in_three_formats_hold_the_same_kind_of_cell():
    mask = tifffile.imread(DEMO / "outlines/tendon_2kPa_a.tif") > 0
    truth = {row["field"]: row for row in rows("truth.csv")}
    row, column = np.argwhere(mask).mean(axis=0)
    assert column * 0.2 == pytest.approx(float(truth["tendon_2kPa_a"]["x_um"]), abs=1e-3)
    assert row * 0.2 == pytest.approx(float(truth["tendon_2kPa_a"]["y_um"]), abs=1e-3)
    with zipfile.ZipFile(DEMO / "outlines/tendon_2kPa_c.zip") as archive:
        points = roifile.ImagejRoi.frombytes(archive.read(archive.namelist()[0])).coordinates() - 0.5
    # Area and centroid of a polygon by the shoelace formula.
    x, y = points.T
    cross = x * np.roll(y, -1) - np.roll(x, -1) * y
    assert (cross * (x + np.roll(x, -1))).sum() / (3 * cross.sum()) * 0.2 == pytest.approx(
        float(truth["tendon_2kPa_c"]["x_um"]), abs=0.05
    )


def test_one_field_written_again_is_the_same_bytes(tmp_path):
    (tmp_path / "images").mkdir()
    (tmp_path / "outlines").mkdir()
    demo._wrong_poisson(demo._Study(tmp_path))
    written = sorted(path.relative_to(tmp_path) for path in tmp_path.rglob("wrong_poisson*"))
    assert len(written) == 3
    for path in written:
        assert (tmp_path / path).read_bytes() == (DEMO / path).read_bytes(), path


def test_the_moments_put_in_rise_with_stiffness_as_the_readme_says():
    truth = rows("truth.csv")
    means = [
        np.mean([float(r["contractile_moment_pNm"]) for r in truth if r["field"].startswith(f"tendon_{e}kPa")])
        for e in (2, 6, 18)
    ]
    assert means == pytest.approx([1.6 * e / (e + 10) for e in (2, 6, 18)], rel=0.2)
    for row in truth:
        total = -(float(row["dipole_xx_pNm"]) + float(row["dipole_yy_pNm"]))
        assert total == pytest.approx(float(row["contractile_moment_pNm"]), abs=2e-6)
