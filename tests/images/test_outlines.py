"""Outlines against matplotlib's point-in-polygon test, exact areas, and regions written by roifile."""

from __future__ import annotations

import io
import json
import math
import zipfile
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import roifile
import tifffile
from hypothesis import given, settings
from hypothesis import strategies as st
from matplotlib.path import Path as MplPath

from tfm.errors import InputError, TfmError
from tfm.images import Outlines, read_outline_stack, read_outlines
from tfm.images.polygons import Shape, first_crossing, rasterise

SHAPE = (60, 80)
Point = tuple[float, float]


def inside(ring: np.ndarray, shape: tuple[int, int] = SHAPE) -> np.ndarray:
    """matplotlib's answer for every pixel centre."""
    rows, columns = np.mgrid[: shape[0], : shape[1]]
    centres = np.stack([columns.ravel(), rows.ravel()], axis=1)
    return MplPath(ring).contains_points(centres).reshape(shape)


def star(rng: np.random.Generator, x: float, y: float, low: float, high: float, n: int = 24) -> np.ndarray:
    """A star-shaped ring: never crosses itself, mostly not convex."""
    angle = np.sort(rng.uniform(0, 2 * np.pi, n))
    radius = rng.uniform(low, high, n)
    return np.stack([x + radius * np.cos(angle), y + radius * np.sin(angle)], axis=1)


def geojson(tmp_path: Path, *features: dict[str, object] | None, name: str = "cells.geojson") -> Path:
    path = tmp_path / name
    path.write_text(json.dumps({"type": "FeatureCollection", "features": features}), encoding="utf-8")
    return path


def feature(*rings: np.ndarray, number: int | None = None, **properties: object) -> dict[str, object]:
    closed = [[*ring.tolist(), ring[0].tolist()] for ring in map(np.asarray, rings)]
    result: dict[str, object] = {
        "type": "Feature",
        "geometry": {"type": "Polygon", "coordinates": closed},
        "properties": properties,
    }
    if number is not None:
        result["id"] = number
    return result


def refusal(call: Callable[[], object]) -> str:
    """What our error says; empty when there is none. Any other error passes through and fails the test."""
    try:
        call()
    except TfmError as error:
        return str(error)
    return ""


SQUARE = np.array([[10.0, 20.0], [30.0, 20.0], [30.0, 40.0], [10.0, 40.0]]) + 0.25


@pytest.mark.parametrize("seed", range(8))
def test_polygons_against_matplotlib(tmp_path: Path, seed: int) -> None:
    rng = np.random.default_rng(seed)
    left, right = star(rng, 20, 30, 6, 17), star(rng, 60, 30, 6, 18)
    outlines = read_outlines(str(geojson(tmp_path, feature(left), feature(right))), SHAPE)
    np.testing.assert_array_equal(outlines.labels == 1, inside(left))
    np.testing.assert_array_equal(outlines.labels == 2, inside(right))
    assert outlines.source == "polygons"
    assert outlines.labels.dtype == np.int32


def test_hole_and_parts(tmp_path: Path) -> None:
    hole = SQUARE * 0.4 + 0.6 * SQUARE.mean(axis=0)
    far = SQUARE + np.array([40, 5])
    multi = feature(SQUARE, hole)
    multi["geometry"] = {"type": "MultiPolygon", "coordinates": [[SQUARE.tolist(), hole.tolist()], [far.tolist()]]}
    outlines = read_outlines(str(geojson(tmp_path, multi)), SHAPE)
    np.testing.assert_array_equal(outlines.labels == 1, (inside(SQUARE) & ~inside(hole)) | inside(far))
    assert outlines.cell_notes[1] == ("the outline is in 2 pieces",)


def test_origin_is_the_centre_of_the_first_pixel(tmp_path: Path) -> None:
    ring = np.array([[-0.4, -0.4], [2.4, -0.4], [2.4, 1.4], [-0.4, 1.4]])
    labels = read_outlines(str(geojson(tmp_path, feature(ring))), SHAPE).labels
    assert np.argwhere(labels).tolist() == [[0, 0], [0, 1], [0, 2], [1, 0], [1, 1], [1, 2]]


@pytest.mark.parametrize("key", ["id", "cell", "label", "feature id"])
def test_numbers_come_from_the_file(tmp_path: Path, key: str) -> None:
    numbers = [7, 3]
    rings = [SQUARE, SQUARE + np.array([35, 0])]
    features = [
        feature(ring, number=n) if key == "feature id" else feature(ring, **{key: n})
        for n, ring in zip(numbers, rings, strict=True)
    ]
    outlines = read_outlines(str(geojson(tmp_path, *features)), SHAPE)
    assert outlines.cells == (3, 7)
    assert outlines.labels[30, 20] == 7
    assert outlines.labels[30, 55] == 3


@pytest.mark.parametrize("text", ["geometry", "feature", "list", "bom"])
def test_smaller_forms_of_geojson(tmp_path: Path, text: str) -> None:
    one = feature(SQUARE)
    document: object = {"geometry": one["geometry"], "feature": one, "list": [one], "bom": one}[text]
    path = tmp_path / "a.json"
    path.write_text(json.dumps(document), encoding="utf-8-sig" if text == "bom" else "utf-8")
    assert np.count_nonzero(read_outlines("a.json", SHAPE, base=tmp_path).labels) == 400


def test_slight_overlap_is_noted_and_a_large_one_refused(tmp_path: Path) -> None:
    outlines = read_outlines(str(geojson(tmp_path, feature(SQUARE), feature(SQUARE + np.array([18, 0])))), SHAPE)
    assert outlines.cell_notes == {2: ("outline overlapped cell 1 by 40 pixels, which that cell keeps",)}
    assert np.count_nonzero(outlines.labels == 1) == 400
    assert np.count_nonzero(outlines.labels == 2) == 360
    with pytest.raises(InputError, match="overlaps cell 1 by 200 pixels") as error:
        read_outlines(str(geojson(tmp_path, feature(SQUARE), feature(SQUARE + np.array([10, 0])))), SHAPE)
    assert error.value.code == "outline-overlap"


def test_cell_cut_by_the_edge_is_kept(tmp_path: Path) -> None:
    outlines = read_outlines(str(geojson(tmp_path, feature(SQUARE - np.array([20, 0])))), SHAPE)
    # columns 0..10 of rows 21..40
    assert np.count_nonzero(outlines.labels) == 11 * 20


def test_crossing_is_found_where_it_is() -> None:
    bow = np.array([[0.0, 0.0], [10.0, 10.0], [10.0, 0.0], [0.0, 10.0]])
    assert first_crossing(bow) == pytest.approx((5.0, 5.0))
    assert first_crossing(SQUARE) is None
    # touching in a point encloses a definite area
    hourglass = np.array([[0.0, 0.0], [10.0, 0.0], [5.0, 5.0], [10.0, 10.0], [0.0, 10.0], [5.0, 5.0]])
    assert first_crossing(hourglass) is None


@settings(derandomize=True, deadline=None, max_examples=40, database=None)
@given(st.integers(0, 10**6), st.integers(3, 40))
def test_star_shaped_rings_never_cross(seed: int, n: int) -> None:
    # Guards against false alarms: rings that cannot cross by construction. A gap above 180 degrees would not be a star.
    rng = np.random.default_rng(seed)
    angle = (np.arange(n) + rng.uniform(0, 0.8, n)) * 2 * np.pi / n
    radius = rng.uniform(2, 30, n)
    assert first_crossing(np.stack([radius * np.cos(angle), radius * np.sin(angle)], axis=1)) is None


# --- ImageJ regions -------------------------------------------------------------------------------------------------


def save_roi(tmp_path: Path, *regions: roifile.ImagejRoi, name: str = "cell.roi") -> str:
    path = tmp_path / name
    if path.suffix == ".roi":
        path.write_bytes(regions[0].tobytes())
    else:
        with zipfile.ZipFile(path, "w") as archive:
            for number, region in enumerate(regions):
                archive.writestr(f"{number:04d}.roi", region.tobytes())
    return str(path)


def box(kind: roifile.ROI_TYPE, left: int, top: int, width: int, height: int) -> roifile.ImagejRoi:
    return roifile.ImagejRoi(roitype=kind, left=left, top=top, right=left + width, bottom=top + height)


def corner_mask(ring: np.ndarray) -> np.ndarray:
    """Pixels whose centres lie in a ring measured from the **corner** of pixel (0, 0): centres are at +0.5."""
    rows, columns = np.mgrid[: SHAPE[0], : SHAPE[1]] + 0.5
    return MplPath(ring).contains_points(np.stack([columns.ravel(), rows.ravel()], axis=1)).reshape(SHAPE)


def test_rectangle_covers_its_columns_and_rows(tmp_path: Path) -> None:
    # ImageJ: a rectangle at 10, 5 of 7 x 4 covers columns 10..16 and rows 5..8 (common practice).
    labels = read_outlines(save_roi(tmp_path, box(roifile.ROI_TYPE.RECT, 10, 5, 7, 4)), SHAPE).labels
    expected = np.zeros(SHAPE, int)
    expected[5:9, 10:17] = 1
    np.testing.assert_array_equal(labels, expected)


@pytest.mark.parametrize("kind", [roifile.ROI_TYPE.POLYGON, roifile.ROI_TYPE.FREEHAND, roifile.ROI_TYPE.TRACED])
def test_integer_polygon_counts_from_the_corner(tmp_path: Path, kind: roifile.ROI_TYPE) -> None:
    region = roifile.ImagejRoi.frompoints([[10, 5], [17, 5], [17, 9], [10, 9]])
    region.roitype = kind
    labels = read_outlines(save_roi(tmp_path, region), SHAPE).labels
    expected = np.zeros(SHAPE, int)
    expected[5:9, 10:17] = 1
    np.testing.assert_array_equal(labels, expected)


@pytest.mark.parametrize("seed", range(4))
def test_subpixel_polygon_is_shifted_by_half_a_pixel(tmp_path: Path, seed: int) -> None:
    ring = star(np.random.default_rng(seed), 40, 30, 8, 22).astype(np.float32)
    region = roifile.ImagejRoi.frompoints(ring)
    assert region.subpixelresolution
    labels = read_outlines(save_roi(tmp_path, region), SHAPE).labels
    expected = corner_mask(ring)
    np.testing.assert_array_equal(labels > 0, expected)
    # without the shift this very check fails
    assert np.count_nonzero(inside(ring) != expected) > 10
    # the centroid of many pixels tells the convention apart: ring centroid minus half a pixel
    x, y = ring.astype(float).T
    cross = x * np.roll(y, -1) - np.roll(x, -1) * y
    cx = ((x + np.roll(x, -1)) * cross).sum() / (3 * cross.sum())
    assert np.argwhere(labels)[:, 1].mean() == pytest.approx(cx - 0.5, abs=0.15)


@pytest.mark.parametrize(("width", "height"), [(40, 40), (50, 20), (9, 31)])
def test_oval_has_the_area_of_its_ellipse(tmp_path: Path, width: int, height: int) -> None:
    labels = read_outlines(save_roi(tmp_path, box(roifile.ROI_TYPE.OVAL, 12, 9, width, height)), SHAPE).labels
    rows, columns = np.argwhere(labels).T
    assert rows.size == pytest.approx(math.pi / 4 * width * height, rel=0.02)
    assert (columns.min(), columns.max()) == (12, 12 + width - 1)
    assert (rows.min(), rows.max()) == (9, 9 + height - 1)
    assert columns.mean() == pytest.approx(12 + width / 2 - 0.5, abs=1e-9)


def test_composite_region_with_a_hole(tmp_path: Path) -> None:
    def path(points: list[Point]) -> list[float]:
        moves = [0.0, *points[0]]
        for point in points[1:]:
            moves += [1.0, *point]
        return [*moves, 4.0]

    outer = [(10.0, 10.0), (40.0, 10.0), (40.0, 40.0), (10.0, 40.0)]
    hole = [(20.0, 20.0), (30.0, 20.0), (30.0, 30.0), (20.0, 30.0)]
    region = box(roifile.ROI_TYPE.RECT, 10, 10, 30, 30)
    region.multi_coordinates = np.array(path(outer) + path(hole), dtype=np.float32)
    region.shape_roi_size = region.multi_coordinates.size
    labels = read_outlines(save_roi(tmp_path, region), SHAPE).labels
    expected = np.zeros(SHAPE, int)
    expected[10:40, 10:40] = 1
    expected[20:30, 20:30] = 0
    np.testing.assert_array_equal(labels, expected)


def test_zip_numbers_regions_in_order(tmp_path: Path) -> None:
    regions = [box(roifile.ROI_TYPE.RECT, 40, 5, 7, 6), box(roifile.ROI_TYPE.OVAL, 5, 5, 20, 20)]
    outlines = read_outlines(save_roi(tmp_path, *regions, name="cells.zip"), SHAPE)
    assert outlines.source == "roi"
    assert outlines.cells == (1, 2)
    assert outlines.labels[8, 42] == 1
    assert outlines.labels[15, 15] == 2


@pytest.mark.parametrize("kind", ["LINE", "FREELINE", "POLYLINE", "ANGLE", "POINT"])
def test_lines_and_points_are_no_outlines(tmp_path: Path, kind: str) -> None:
    region = roifile.ImagejRoi.frompoints([[1, 2], [5, 9], [12, 3]])
    region.roitype = roifile.ROI_TYPE[kind]
    with pytest.raises(InputError, match="not an area") as error:
        read_outlines(save_roi(tmp_path, region), SHAPE)
    assert error.value.code == "not-an-area"


def test_regions_of_several_frames_are_refused(tmp_path: Path) -> None:
    regions = [box(roifile.ROI_TYPE.RECT, 10, 5, 7, 6), box(roifile.ROI_TYPE.RECT, 30, 5, 7, 6)]
    for number, region in enumerate(regions, start=1):
        region.t_position = number
    with pytest.raises(InputError, match="different slices or frames") as error:
        read_outlines(save_roi(tmp_path, *regions, name="cells.zip"), SHAPE)
    assert error.value.code == "several-frames"


# --- label images ---------------------------------------------------------------------------------------------------


def label_file(tmp_path: Path, data: np.ndarray, name: str = "labels.tif", **options: object) -> str:
    tifffile.imwrite(tmp_path / name, data, photometric="minisblack", **options)  # type: ignore[arg-type]
    return name


@pytest.mark.parametrize("dtype", ["uint8", "uint16", "int32", "uint32", "float32", "float64"])
def test_label_images_of_every_type(tmp_path: Path, dtype: str) -> None:
    data = np.zeros(SHAPE, dtype)
    data[5:20, 5:20] = 1
    data[30:50, 40:60] = 4
    outlines = read_outlines(label_file(tmp_path, data), SHAPE, base=tmp_path)
    assert outlines.cells == (1, 4)
    assert not outlines.notes
    assert not outlines.cell_notes
    np.testing.assert_array_equal(outlines.labels, data)


def test_large_label_numbers_survive(tmp_path: Path) -> None:
    # float32 would turn 16,777,217 into 16,777,216
    data = np.zeros(SHAPE, np.uint32)
    data[5:20, 5:20] = 16_777_217
    assert read_outlines(label_file(tmp_path, data), SHAPE, base=tmp_path).cells == (16_777_217,)


@pytest.mark.parametrize("kind", ["uint8", "bool"])
def test_black_and_white_masks(tmp_path: Path, kind: str) -> None:
    data = np.zeros(SHAPE, bool)
    data[5:20, 5:20] = True
    stored = data if kind == "bool" else (data * 255).astype(np.uint8)
    path = tmp_path / "mask.tif"
    tifffile.imwrite(path, stored)
    assert read_outlines(str(path), SHAPE).cells == (1,)
    data[30:50, 40:60] = True
    stored = data if kind == "bool" else (data * 255).astype(np.uint8)
    tifffile.imwrite(path, stored)
    with pytest.raises(InputError, match="mask with 2 areas") as error:
        read_outlines(str(path), SHAPE)
    assert error.value.code == "outline-labels"


def test_notes_on_pieces_and_tiny_cells(tmp_path: Path) -> None:
    data = np.zeros(SHAPE, np.uint8)
    data[5:20, 5:20] = 1
    data[30:40, 5:20] = 1
    data[50:52, 50:52] = 2
    outlines = read_outlines(label_file(tmp_path, data), SHAPE, base=tmp_path)
    assert outlines.cell_notes == {1: ("the outline is in 2 pieces",), 2: ("the outline covers only 4 pixels",)}


def moving(n: int = 5) -> np.ndarray:
    """Two cells that wander; each frame numbers them afresh from the top, so the numbers swap on the way."""
    stack = np.zeros((n, *SHAPE), np.uint16)
    for t in range(n):
        a, b = (slice(5 + 6 * t, 20 + 6 * t), slice(5, 25)), (slice(20, 35), slice(45, 65))
        first, second = (1, 2) if a[0].start <= b[0].start else (2, 1)
        stack[t][a], stack[t][b] = first, second
    return stack


def test_label_stack_follows_the_cells(tmp_path: Path) -> None:
    stack = moving()
    path = label_file(tmp_path, stack, imagej=True, metadata={"axes": "TYX"})
    outlines = read_outline_stack(path, SHAPE, base=tmp_path, n_frames=5)
    assert outlines.n_frames == 5
    assert any(stack[t, 25, 50] != stack[0, 25, 50] for t in range(5))
    for t in range(5):
        frame = outlines.at(t)
        assert isinstance(frame, Outlines)
        assert frame.labels[25, 50] == 2
        assert frame.labels[10 + 6 * t, 10] == 1
    assert read_outlines(path, SHAPE, base=tmp_path, frame=4).labels[10 + 24, 10] == 1
    with pytest.raises(InputError, match="5 frames and the stressed stack 7") as error:
        read_outline_stack(path, SHAPE, base=tmp_path, n_frames=7)
    assert error.value.code == "outline-frames"
    with pytest.raises(InputError, match="no outline for frame 5"):
        outlines.at(5)


def test_cells_may_leave_before_the_series_ends(tmp_path: Path) -> None:
    stack = moving(3)
    stack[1] = 0
    path = label_file(tmp_path, stack, imagej=True, metadata={"axes": "TYX"})
    outlines = read_outline_stack(path, SHAPE, base=tmp_path)
    assert outlines.at(1).cells == ()
    assert outlines.at(2).labels[25, 50] == 2
    path = label_file(tmp_path, stack * 0, "none.tif", imagej=True, metadata={"axes": "TYX"})
    with pytest.raises(InputError, match="no frame holds a cell") as error:
        read_outline_stack(path, SHAPE, base=tmp_path)
    assert error.value.code == "no-outline"


def test_one_set_of_outlines_holds_for_every_frame(tmp_path: Path) -> None:
    outlines = read_outline_stack(str(geojson(tmp_path, feature(SQUARE))), SHAPE, n_frames=9)
    assert outlines.n_frames == 1
    assert outlines.at(8) is outlines.at(0)


WORDS = st.sampled_from(["Feature", "Polygon", "FeatureCollection", "MultiPolygon"])
KEYS = st.sampled_from(["type", "features", "geometry", "coordinates", "id", "properties"])
JSON = st.recursive(
    st.none() | st.booleans() | st.floats() | st.integers() | st.text(max_size=5) | WORDS,
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(KEYS, inner, max_size=4),
    max_leaves=20,
)


@settings(derandomize=True, deadline=None, max_examples=150, database=None)
@given(JSON)
def test_any_json_is_an_outline_or_an_error_of_ours(document: object) -> None:
    from tfm.images.polygons import read_geojson

    def read() -> None:
        shapes = read_geojson(json.dumps(document).encode(), file="a.json")
        rasterise(shapes, (8, 8), file="a.json", source="polygons")

    assert "\n" not in refusal(read)


@settings(derandomize=True, deadline=None, max_examples=150, database=None)
@given(st.data())
def test_flipped_region_files_are_read_or_refused(data: st.DataObject) -> None:
    from tfm.images.roi import read_roi

    single = roifile.ImagejRoi.frompoints([[10.5, 5.0], [17.0, 5.0], [17.0, 9.0], [10.0, 9.0]], name="cell").tobytes()
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("a.roi", single)
    content = bytearray(data.draw(st.sampled_from([single, buffer.getvalue()])))
    for position in data.draw(st.lists(st.integers(0, len(content) - 1), max_size=6)):
        content[position] = data.draw(st.integers(0, 255))
    content = content[: data.draw(st.integers(0, len(content)))]

    def read() -> None:
        rasterise(read_roi(bytes(content), file="a.roi"), (32, 32), file="a.roi", source="roi")

    assert "\n" not in refusal(read)


def test_shape_without_a_pixel_is_refused() -> None:
    sliver = np.array([[10.1, 10.1], [10.4, 10.1], [10.4, 10.4]])
    with pytest.raises(InputError, match="covers no pixel"):
        rasterise([Shape("outline 1", ((sliver,),))], SHAPE, file="a", source="polygons")
