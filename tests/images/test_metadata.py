"""Scale of an image: facts of the OME schema, of TIFF 6.0 and of ImageJ, against files of an independent writer."""

from __future__ import annotations

from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pint
import pytest
import tifffile
from hypothesis import given, settings
from hypothesis import strategies as st

from tfm.errors import InputError
from tfm.images import open_frames
from tfm.images.metadata import (
    from_imagej,
    from_ome,
    from_resolution_tags,
    length_in_m,
    parse_ome,
    time_in_s,
)

FUZZ = settings(derandomize=True, deadline=None, max_examples=200, database=None)


def ome(attributes: str, inner: str = "") -> ElementTree.Element:
    space = "http://www.openmicroscopy.org/Schemas/OME/2016-06"
    return parse_ome(f'<OME xmlns="{space}"><Image><Pixels {attributes}>{inner}</Pixels></Image></OME>')


@pytest.mark.parametrize("unit", ["nm", "um", "mm", "cm", "m", "pm", "inch", "angstrom", "thou"])
def test_units_of_length_against_pint(unit: str) -> None:
    expected = pint.UnitRegistry(cache_folder=None).Quantity(3.25, unit).to("m").magnitude
    assert length_in_m(3.25, unit) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("unit", ["ns", "us", "ms", "s", "min", "hour", "day"])
def test_units_of_time_against_pint(unit: str) -> None:
    expected = pint.UnitRegistry(cache_folder=None).Quantity(3.25, unit).to("s").magnitude
    assert time_in_s(3.25, "d" if unit == "day" else unit) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize(
    "unit", ["um", "µm", "μm", "\\u00B5m", "\\u00b5m", "micron", "microns", "micrometer", " um ", "Micron", "[um]"]
)
def test_every_spelling_of_a_micrometre(unit: str) -> None:
    assert length_in_m("0.2", unit) == 2e-7
    assert from_imagej({"unit": unit}, (5, 1), (5, 1)).pixel_x == 2e-7


@pytest.mark.parametrize(
    "unit", ["pixel", "pixels", "", "none", "gray", "px", None, 3, "reference frame", "light-year"]
)
def test_no_unit_is_no_pixel_size(unit: object) -> None:
    assert from_imagej({"unit": unit}, (5, 1), (5, 1)).pixel_x is None
    assert length_in_m(1.0, unit) is None


def test_ome_defaults_are_those_of_the_schema() -> None:
    # OME schema 2016-06: PhysicalSizeX in um and TimeIncrement in s unless a unit is given.
    scale = from_ome(ome('PhysicalSizeX="0.13" TimeIncrement="4"'))
    assert (scale.pixel_x, scale.pixel_y, scale.frame_interval, scale.origin) == (1.3e-7, 1.3e-7, 4.0, "OME")
    scale = from_ome(ome('PhysicalSizeX="130" PhysicalSizeXUnit="nm" TimeIncrement="2" TimeIncrementUnit="min"'))
    assert (scale.pixel_x, scale.frame_interval) == (1.3e-7, 120.0)


@pytest.mark.parametrize(
    "attributes",
    [
        'PhysicalSizeX="1.0"',
        'PhysicalSizeX="1" PhysicalSizeXUnit="pixel"',
        'PhysicalSizeX="0"',
        'PhysicalSizeX="-0.2"',
        'PhysicalSizeX="nan"',
        'PhysicalSizeX="inf"',
        'PhysicalSizeX="0,2"',
        'PhysicalSizeX=""',
        'PhysicalSizeX="1e-300"',
        'PhysicalSizeX="5" PhysicalSizeXUnit="mm"',
        "",
    ],
)
def test_ome_numbers_that_are_no_pixel_size(attributes: str) -> None:
    scale = from_ome(ome(attributes))
    assert scale.pixel_x is None
    assert scale.origin == ""


def test_frame_interval_from_even_plane_times_only() -> None:
    def planes(times: list[float]) -> str:
        return "".join(f'<Plane TheT="{t}" TheZ="0" TheC="0" DeltaT="{v}"/>' for t, v in enumerate(times))

    assert from_ome(ome("", planes([0.1, 30.2, 60.0, 90.1]))).frame_interval == pytest.approx(30.0, rel=1e-3)
    assert from_ome(ome("", planes([0.0, 30.0, 90.0]))).frame_interval is None
    assert from_ome(ome("", planes([0.0]))).frame_interval is None
    assert from_ome(ome("", planes([0.0, 0.0]))).frame_interval is None


def test_imagej_intervals() -> None:
    assert from_imagej({"finterval": 0.5, "tunit": "min"}, None, None).frame_interval == 30.0
    assert from_imagej({"finterval": 0.0}, None, None).frame_interval is None
    assert from_imagej({"fps": 4.0}, None, None).frame_interval == 0.25
    assert from_imagej({"finterval": 2.0, "tunit": "seconds"}, None, None).frame_interval == 2.0


@pytest.mark.parametrize(
    ("ratio", "unit", "expected"),
    [
        ((50_000, 1), 3, 2e-7),
        ((127_000, 1), 2, 2e-7),  # 25.4 mm / 0.2 um = 127,000 pixels per inch
        ((72, 1), 2, None),
        ((300, 1), 2, None),
        ((1, 1), 1, None),
        ((50_000, 1), 1, None),
        ((0, 0), 3, None),
        ((50_000, 0), 3, None),
        (None, None, None),
        ("junk", 3, None),
        ((4294967295, 1), 3, None),
    ],
)
def test_resolution_tags(ratio: object, unit: object, expected: float | None) -> None:
    scale = from_resolution_tags(ratio, ratio, unit)
    assert scale.pixel_x == (pytest.approx(expected, rel=1e-12) if expected else None)


@pytest.mark.parametrize(
    ("resolution", "unit", "expected"),
    [((50_000, 50_000), "CENTIMETER", 2e-7), ((72, 72), "INCH", None), ((5, 5), "NONE", None)],
)
def test_resolution_tags_of_written_files(
    tmp_path: Path, resolution: tuple[int, int], unit: str, expected: float | None
) -> None:
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, np.zeros((4, 4), np.uint8), resolution=resolution, resolutionunit=unit)
    assert open_frames(path).pixel_size == (pytest.approx(expected, rel=1e-9) if expected else None)


def test_ome_comes_before_the_resolution_tags(tmp_path: Path) -> None:
    path = tmp_path / "a.ome.tif"
    meta = {
        "axes": "YX",
        "PhysicalSizeX": 0.2,
        "PhysicalSizeXUnit": "µm",
        "PhysicalSizeY": 0.2,
        "PhysicalSizeYUnit": "µm",
    }
    tifffile.imwrite(
        path, np.zeros((4, 4), np.uint8), ome=True, metadata=meta, resolution=(40_000, 40_000), resolutionunit=3
    )
    stack = open_frames(path)
    assert (stack.pixel_size, stack.origin) == (2e-7, "OME")
    # an OME file that is silent about its scale falls back to the tags
    tifffile.imwrite(
        path,
        np.zeros((4, 4), np.uint8),
        ome=True,
        metadata={"axes": "YX"},
        resolution=(40_000, 40_000),
        resolutionunit=3,
    )
    stack = open_frames(path)
    assert (stack.pixel_size, stack.origin) == (pytest.approx(2.5e-7, rel=1e-9), "resolution tags")


def test_imagej_resolution_is_not_read_as_centimetres(tmp_path: Path) -> None:
    path = tmp_path / "ij.tif"
    tifffile.imwrite(path, np.zeros((4, 4), np.uint8), imagej=True, resolution=(50_000, 50_000), resolutionunit=3)
    assert open_frames(path).pixel_size is None


@pytest.mark.parametrize(
    "xml", ["<OME", "", "<OME></OMX>", "\0", '<!DOCTYPE a [<!ENTITY b "c">]><OME>&b;</OME>', "<OME>\ud800</OME>"]
)
def test_damaged_ome_is_an_input_error(xml: str) -> None:
    if "\ud800" in xml:
        parse_ome(xml)  # a lone surrogate is replaced, not fatal
        return
    with pytest.raises(InputError) as error:
        parse_ome(xml, file="a.tif")
    assert error.value.code == "ome-metadata"
    assert "\n" not in str(error.value)


@FUZZ
@given(st.dictionaries(st.sampled_from(["PhysicalSizeX", "PhysicalSizeXUnit", "PhysicalSizeY", "TimeIncrement",
                                        "TimeIncrementUnit", "SignificantBits"]), st.text(max_size=12)))  # fmt: skip
def test_any_text_in_ome_gives_a_sane_scale_or_none(attributes: dict[str, str]) -> None:
    root = ElementTree.Element("OME")
    ElementTree.SubElement(ElementTree.SubElement(root, "Image"), "Pixels", attributes)
    scale = from_ome(root)
    assert scale.pixel_x is None or 1e-9 <= scale.pixel_x <= 2e-5
    assert scale.frame_interval is None or 0 < scale.frame_interval < float("inf")
    assert scale.significant_bits is None or 1 <= scale.significant_bits <= 32


@FUZZ
@given(
    st.dictionaries(
        st.sampled_from(["unit", "finterval", "tunit", "fps"]),
        st.one_of(st.text(max_size=8), st.floats(), st.integers(), st.none(), st.booleans()),
    ),
    st.one_of(st.none(), st.tuples(st.integers(0, 2**32), st.integers(0, 2**32)), st.text(max_size=4), st.floats()),
)
def test_any_imagej_description_gives_a_sane_scale_or_none(metadata: dict[str, object], ratio: object) -> None:
    for scale in (from_imagej(metadata, ratio, ratio), from_resolution_tags(ratio, ratio, metadata.get("unit"))):
        assert scale.pixel_x is None or 1e-9 <= scale.pixel_x <= 2e-5
        assert scale.frame_interval is None or 0 < scale.frame_interval < float("inf")
