"""Microscopes' own formats, on tiny files laid out here and read through the libraries behind the extras.

Layouts: "Leica Image File Formats", version 3.2 (2016), and "ZISRAW (CZI) File Format", version 1.2 (from memory, as
far as the independent readers check it). No writer for nd2 exists and its layout is not published: that reader is
checked with a stand-in for the library's file object only, which docs/images.md says.
"""

from __future__ import annotations

import builtins
import importlib
import struct
import sys
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from tfm.errors import InputError, MeasurementError
from tfm.images import open_frames, resolve_pixel_size

SHAPE = (20, 24)
DATA = np.random.default_rng(0).integers(0, 4096, (3, 2, 4, *SHAPE)).astype(np.uint16)  # T, C, Z


def lif(path: Path, images: int = 1, kept: float = 1.0) -> Path:
    """T slowest, then channel, then Z; 0.25 um pixels, 30 s between frames."""
    ny, nx = SHAPE
    plane = ny * nx * 2
    dims = [(1, nx, 2, 0.25e-6 * (nx - 1), "m"), (2, ny, 2 * nx, 0.25e-6 * (ny - 1), "m"), (3, 4, plane, 3e-6, "m"),
            (4, 3, plane * 8, 60.0, "s")]  # fmt: skip
    described = "".join(
        f'<DimensionDescription DimID="{i}" NumberOfElements="{n}" Origin="0" Length="{length!r}" Unit="{unit}" '
        f'BitInc="0" BytesInc="{step}"/>'
        for i, n, step, length, unit in dims
    )
    channels = "".join(
        f'<ChannelDescription DataType="0" ChannelTag="0" Resolution="12" NameOfMeasuredQuantity="" Min="0" Max="1" '
        f'Unit="" LUTName="Gray" IsLUTInverted="0" BytesInc="{c * plane * 4}" BitInc="0"/>'
        for c in range(2)
    )
    elements = "".join(
        f'<Element Name="field {k}" UniqueID="{k}"><Data><Image><ImageDescription><Channels>{channels}</Channels>'
        f"<Dimensions>{described}</Dimensions></ImageDescription></Image></Data>"
        f'<Memory Size="{DATA.nbytes}" MemoryBlockID="MemBlock_{k}"/></Element>'
        for k in range(images)
    )
    xml = (
        f'<LMSDataContainerHeader Version="2"><Element Name="study"><Children>{elements}</Children></Element>'
        "</LMSDataContainerHeader>"
    ).encode("utf-16-le")
    content = struct.pack("<IIBI", 0x70, len(xml) + 5, 0x2A, len(xml) // 2) + xml
    for k in range(images):
        name = f"MemBlock_{k}".encode("utf-16-le")
        block = struct.pack("<IIBQBI", 0x70, len(name) + 14, 0x2A, DATA.nbytes, 0x2A, len(name) // 2)
        content += block + name + DATA.tobytes()
    path.write_bytes(content[: int(kept * len(content))])
    return path


def czi(path: Path, *, tiles: int = 1, drop: int = 0, kept: float = 1.0) -> Path:
    """One sub-block per plane; 0.25 um pixels, 30 s between frames."""

    def segment(name: bytes, data: bytes) -> bytes:
        return struct.pack("<16sqq", name, len(data), len(data)) + data

    def entry(t: int, c: int, z: int, tile: int, position: int) -> bytes:
        # the file lists X first
        dims = [(b"X", 0, SHAPE[1]), (b"Y", 0, SHAPE[0]), (b"Z", z, 1), (b"C", c, 1), (b"T", t, 1)]
        if tiles > 1:
            dims.append((b"M", tile, 1))
        body = b"".join(struct.pack("<4siifi", name, start, size, 0.0, size) for name, start, size in dims)
        return struct.pack("<2siqiiBB4si", b"DV", 1, position, 0, 0, 0, 0, b"", len(dims)) + body

    xml = (
        b"<ImageDocument><Metadata><Scaling><Items>"
        b"<Distance Id='X'><Value>2.5e-07</Value></Distance><Distance Id='Y'><Value>2.5e-07</Value></Distance>"
        b"</Items></Scaling><Information><Image><ComponentBitCount>12</ComponentBitCount><Dimensions><T><Positions><Interval>"
        b"<Start>0</Start><Increment>30</Increment></Interval></Positions></T></Dimensions></Image></Information>"
        b"</Metadata></ImageDocument>"
    )
    content = bytearray(segment(b"ZISRAWFILE", bytes(512)))
    entries = []
    for t, c, z, tile in np.ndindex(3, 2, 4, tiles):
        listed = entry(t, c, z, tile, len(content))
        pixels = DATA[t, c, z].tobytes()
        head = struct.pack("<iiq", 0, 0, len(pixels)) + listed
        content += segment(b"ZISRAWSUBBLOCK", head.ljust(256, b"\0") + pixels)
        entries.append(listed)
    entries = entries[: len(entries) - drop]
    directory = len(content)
    content += segment(b"ZISRAWDIRECTORY", struct.pack("<i124x", len(entries)) + b"".join(entries))
    described = len(content)
    content += segment(b"ZISRAWMETADATA", struct.pack("<ii248x", len(xml), 0) + xml)
    content[32 : 32 + 80] = struct.pack("<iiii16s16siqqiq", 1, 0, 0, 0, b"", b"", 0, directory, described, 0, 0)
    path.write_bytes(content[: int(kept * len(content))])
    return path


@pytest.mark.parametrize(("make", "name", "module"), [(lif, "a.lif", "liffile"), (czi, "a.CZI", "czifile")])
def test_planes_scale_and_axes(make: object, name: str, module: str, tmp_path: Path) -> None:
    pytest.importorskip(module)
    stack = open_frames(make(tmp_path / name))  # type: ignore[operator]
    assert (stack.n_frames, stack.n_channels, stack.n_planes) == (3, 2, 4)
    assert stack.shape == SHAPE
    assert resolve_pixel_size([stack]) == pytest.approx(0.25e-6, rel=1e-9)
    assert stack.frame_interval == pytest.approx(30.0, rel=1e-9)
    for t, c, z in np.ndindex(3, 2, 4):
        np.testing.assert_array_equal(stack.frame(t, channel=c, plane=z), DATA[t, c, z])


def test_czi_tells_the_cameras_bits(tmp_path: Path) -> None:
    pytest.importorskip("czifile")
    assert open_frames(czi(tmp_path / "a.czi")).saturation_level == 4095


def test_several_images_are_refused(tmp_path: Path) -> None:
    pytest.importorskip("liffile")
    pytest.importorskip("czifile")
    for path in (lif(tmp_path / "a.lif", images=2), czi(tmp_path / "a.czi", tiles=2)):
        with pytest.raises(InputError) as error:
            open_frames(path)
        assert error.value.code == "several-images"


@pytest.mark.parametrize("kept", [0.001, 0.02, 0.5, 0.9])
@pytest.mark.parametrize(("make", "name", "module"), [(lif, "a.lif", "liffile"), (czi, "a.czi", "czifile")])
def test_cut_files_are_refused(make: object, name: str, module: str, kept: float, tmp_path: Path) -> None:
    pytest.importorskip(module)
    path = make(tmp_path / name, kept=kept)  # type: ignore[operator]

    def read_all() -> None:
        stack = open_frames(path)
        for t, c, z in np.ndindex(3, 2, 4):
            stack.frame(t, channel=c, plane=z)

    with pytest.raises((InputError, MeasurementError)) as error:
        read_all()
    assert "\n" not in str(error.value)


def test_missing_plane_is_said(tmp_path: Path) -> None:
    pytest.importorskip("czifile")
    stack = open_frames(czi(tmp_path / "a.czi", drop=1))
    with pytest.raises(MeasurementError) as error:
        stack.frame(2, channel=1, plane=3)
    assert error.value.code == "missing-planes"


@pytest.mark.parametrize(("name", "extra"), [("a.nd2", "nd2"), ("a.lif", "liffile"), ("a.czi", "czi")])
def test_missing_library_names_the_extra(
    name: str, extra: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / name).write_bytes(b"something")
    module = {"nd2": "nd2", "liffile": "liffile", "czi": "czifile"}[extra]
    monkeypatch.setitem(sys.modules, module, None)
    with pytest.raises(InputError, match=rf"tugtensor\[{extra}\]") as error:
        open_frames(tmp_path / name)
    assert error.value.code == "missing-extra"


@pytest.mark.parametrize(("name", "module"), [("a.nd2", "nd2"), ("a.lif", "liffile"), ("a.czi", "czifile")])
@pytest.mark.parametrize("content", [b"these are not pixels at all", bytes(5000), b"\xda\xce\xbe\x0a" + bytes(500)])
def test_files_that_only_have_the_name(name: str, module: str, content: bytes, tmp_path: Path) -> None:
    pytest.importorskip(module)
    (tmp_path / name).write_bytes(content)
    with pytest.raises((InputError, MeasurementError)) as error:
        open_frames(tmp_path / name)
    assert "\n" not in str(error.value)


class StandIn:
    """The part of ``nd2.ND2File`` that is used, as its documentation (0.12) describes it."""

    def __init__(self, path: str) -> None:
        assert builtins.open(path, "rb").close() is None
        self.sizes = {"T": 3, "Z": 4, "C": 2, "Y": SHAPE[0], "X": SHAPE[1]}
        self.dtype = np.dtype("uint16")
        self.attributes = SimpleNamespace(bitsPerComponentSignificant=12)
        self.experiment = [SimpleNamespace(type="TimeLoop", parameters=SimpleNamespace(periodMs=30_000.0))]
        self.loop_indices = tuple({"T": t, "Z": z} for t in range(3) for z in range(4))

    def __enter__(self) -> StandIn:
        return self

    def __exit__(self, *_: object) -> None:
        pass

    def voxel_size(self) -> SimpleNamespace:
        return SimpleNamespace(x=0.25, y=0.25, z=1.0)

    def read_frame(self, number: int) -> np.ndarray:
        place = self.loop_indices[number]
        return DATA[place["T"], :, place["Z"]]


def test_nd2_through_a_stand_in(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    nd2 = pytest.importorskip("nd2")
    for name in ("sizes", "dtype", "attributes", "experiment", "loop_indices", "voxel_size", "read_frame"):
        assert hasattr(nd2.ND2File, name)  # the library still has what the stand-in imitates
    (tmp_path / "a.nd2").write_bytes(b"any")
    monkeypatch.setattr(importlib.import_module("nd2"), "ND2File", StandIn)
    stack = open_frames(tmp_path / "a.nd2")
    assert (stack.n_frames, stack.n_channels, stack.n_planes) == (3, 2, 4)
    assert (stack.pixel_size, stack.frame_interval, stack.saturation_level) == (2.5e-7, 30.0, 4095)
    for t, c, z in np.ndindex(3, 2, 4):
        np.testing.assert_array_equal(stack.frame(t, channel=c, plane=z), DATA[t, c, z])
