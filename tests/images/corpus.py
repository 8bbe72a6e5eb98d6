"""Bad image and outline files, made by code: each writes itself into a folder and says which code it must get."""

from __future__ import annotations

import io
import json
import os
import struct
import zipfile
import zlib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import roifile
import tifffile

SHAPE = (48, 64)
GREY = np.random.default_rng(0).integers(50, 4000, SHAPE).astype(np.uint16)
STACK = np.random.default_rng(1).integers(50, 4000, (5, *SHAPE)).astype(np.uint16)


@dataclass(frozen=True)
class Bad:
    """``make(folder)`` returns the path to hand over; ``code`` is what it must be refused with."""

    name: str
    code: str
    make: Callable[[Path], object]


def tiff(tags: dict[int, tuple[int, int, int]], data: bytes = b"", *, following: int = 0) -> bytes:
    """A little-endian TIFF of one directory behind its data; ``tags`` maps number to (type, count, value)."""
    start = 8 + len(data)
    body = b"".join(struct.pack("<HHII", tag, *entry) for tag, entry in sorted(tags.items()))
    return (
        b"II*\0" + struct.pack("<I", start) + data + struct.pack("<H", len(tags)) + body + struct.pack("<I", following)
    )


def grey_tags(
    width: int, height: int, *, length: int, bits: int = 16, compression: int = 1
) -> dict[int, tuple[int, int, int]]:
    return {
        256: (4, 1, width),
        257: (4, 1, height),
        258: (3, 1, bits),
        259: (3, 1, compression),
        262: (3, 1, 1),
        273: (4, 1, 8),
        277: (3, 1, 1),
        278: (4, 1, height),
        279: (4, 1, length),
    }


def write(content: bytes, name: str = "bad.tif") -> Callable[[Path], Path]:
    def make(folder: Path) -> Path:
        (folder / name).write_bytes(content)
        return folder / name

    return make


def saved(data: np.ndarray, name: str = "bad.tif", **options: object) -> Callable[[Path], Path]:
    def make(folder: Path) -> Path:
        tifffile.imwrite(folder / name, data, **options)  # type: ignore[arg-type]
        return folder / name

    return make


def cut(share: float, data: np.ndarray = STACK, **options: object) -> Callable[[Path], Path]:
    def make(folder: Path) -> Path:
        path = saved(data, **options)(folder)
        content = path.read_bytes()
        path.write_bytes(content[: int(share * len(content))])
        return path

    return make


def retagged(code: str, value: object, data: np.ndarray = GREY, **options: object) -> Callable[[Path], Path]:
    """A good file with one tag of its first directory overwritten."""

    def make(folder: Path) -> Path:
        path = saved(data, **options)(folder)
        with tifffile.TiffFile(path, mode="r+b") as tif:
            tif.pages[0].tags[code].overwrite(value)
        return path

    return make


def ome(change: Callable[[str], str], data: np.ndarray = STACK, axes: str = "TYX") -> Callable[[Path], Path]:
    def make(folder: Path) -> Path:
        path = folder / "bad.ome.tif"
        tifffile.imwrite(path, data, ome=True, metadata={"axes": axes}, photometric="minisblack")
        with tifffile.TiffFile(path, mode="r+b") as tif:
            text = tif.pages[0].description
            assert change(text) != text
            tif.pages[0].tags["ImageDescription"].overwrite(change(text).encode())
        return path

    return make


def described(text: str, data: np.ndarray = STACK) -> Callable[[Path], Path]:
    def make(folder: Path) -> Path:
        path = folder / "bad.tif"
        tifffile.imwrite(path, data, description=text, metadata=None, photometric="minisblack")
        return path

    return make


def special(kind: str) -> Callable[[Path], object]:
    def make(folder: Path) -> object:
        path = folder / kind
        if kind == "pipe":
            os.mkfifo(path)
        elif kind == "folder":
            path.mkdir()
        elif kind == "dangling":
            path.symlink_to(folder / "nowhere")
        elif kind == "loop":
            path.symlink_to(path)
        elif kind == "long":
            return folder / ("x" * 5000)
        elif kind == "zero byte":
            return f"{folder}/a\0b.tif"
        elif kind == "device":
            return "/dev/zero"
        return path

    return make


def zip_of(entries: dict[str, bytes], name: str = "bad.zip") -> Callable[[Path], Path]:
    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as archive:
        for key, value in entries.items():
            archive.writestr(key, value)
    return write(buffer.getvalue(), name)


def region(kind: str, **fields: object) -> bytes:
    roi = roifile.ImagejRoi.frompoints([[10, 5], [30, 5], [30, 25], [10, 25]], name="cell")
    roi.roitype = roifile.ROI_TYPE[kind]
    for key, value in fields.items():
        setattr(roi, key, value)
    return bytes(roi.tobytes())


def polygons(*rings: object, **members: object) -> Callable[[Path], Path]:
    features = [
        {"type": "Feature", "geometry": {"type": "Polygon", "coordinates": [r]}, "properties": {}, **members}
        for r in rings
    ]
    return geo({"type": "FeatureCollection", "features": features})


def geo(document: object) -> Callable[[Path], Path]:
    return write(json.dumps(document).encode(), "bad.geojson")


def labels(fill: Callable[[np.ndarray], object], dtype: str = "uint16", **options: object) -> Callable[[Path], Path]:
    data = np.zeros(SHAPE, dtype)
    fill(data)
    return saved(data, **options)


def _loop(links: int) -> bytes:
    """A chain of directories whose last one leads back to the middle of the chain."""
    one = 2 + 12 * 9 + 4
    tags = grey_tags(4, 4, length=32)
    body = b"".join(struct.pack("<HHII", tag, *entry) for tag, entry in sorted(tags.items()))
    start = 8 + 32
    offsets = [start + i * one for i in range(links)]
    chain = b""
    for i in range(links):
        following = offsets[i + 1] if i + 1 < links else offsets[links // 2]
        chain += struct.pack("<H", 9) + body + struct.pack("<I", following)
    return b"II*\0" + struct.pack("<I", start) + bytes(32) + chain


def _short_tile(folder: Path) -> Path:
    path = saved(np.full((64, 64), 7, np.uint16), tile=(64, 64), compression="zlib")(folder)
    with tifffile.TiffFile(path, mode="r+b") as tif:
        page = tif.pages[0]
        short = zlib.compress(np.full((20, 64), 7, np.uint16).tobytes())
        offset = page.dataoffsets[0]
        page.tags["TileByteCounts"].overwrite(len(short))
    content = bytearray(path.read_bytes())
    content[offset : offset + len(short)] = short
    path.write_bytes(content)
    return path


def _spoiled(folder: Path) -> Path:
    path = saved(GREY, compression="zlib")(folder)
    with tifffile.TiffFile(path) as tif:
        offset = tif.pages[0].dataoffsets[0]
    content = bytearray(path.read_bytes())
    content[offset + 20 : offset + 60] = bytes(40)
    path.write_bytes(content)
    return path


def _two_shapes(folder: Path) -> Path:
    with tifffile.TiffWriter(folder / "bad.tif") as writer:
        writer.write(GREY)
        writer.write(GREY[:20])
    return folder / "bad.tif"


def _positions(folder: Path) -> Path:
    with tifffile.TiffWriter(folder / "bad.ome.tif", ome=True) as writer:
        writer.write(GREY)
        writer.write(GREY)
    return folder / "bad.ome.tif"


def _sparse(folder: Path) -> Path:
    path = saved(GREY, tile=(16, 16), compression="zlib")(folder)
    with tifffile.TiffFile(path, mode="r+b") as tif:
        page = tif.pages[0]
        counts = list(page.databytecounts)
        counts[3] = 0
        page.tags["TileByteCounts"].overwrite(counts)
    return path


def _lost_middle(folder: Path) -> Path:
    """The last of five directories is cut off although all pixels before it are there."""
    with tifffile.TiffWriter(folder / "bad.tif") as writer:
        for frame in STACK:
            writer.write(frame, contiguous=False, metadata=None)
    with tifffile.TiffFile(folder / "bad.tif") as tif:
        end = tif.pages[4].offset
    content = (folder / "bad.tif").read_bytes()
    (folder / "bad.tif").write_bytes(content[: end + 20])
    return folder / "bad.tif"


RGB = np.zeros((*SHAPE, 3), np.uint8)
PIXELS = GREY.tobytes()
BOMB = "<!DOCTYPE a [" + "".join(f'<!ENTITY e{i} "&e{i - 1};&e{i - 1};">' for i in range(1, 40)) + "]>"

IMAGES = [
    Bad("missing", "missing-file", lambda folder: folder / "nowhere.tif"),
    Bad("folder", "not-a-file", special("folder")),
    Bad("pipe", "not-a-file", special("pipe")),
    Bad("device", "not-a-file", special("device")),
    Bad("dangling link", "missing-file", special("dangling")),
    Bad("link to itself", "missing-file", special("loop")),
    Bad("name too long", "missing-file", special("long")),
    Bad("zero byte in the name", "missing-file", special("zero byte")),
    Bad("empty", "empty-file", write(b"")),
    Bad("text", "not-a-tiff", write(b"these are not pixels\n")),
    Bad("png", "not-a-tiff", write(b"\x89PNG\r\n\x1a\n" + bytes(50))),
    Bad("pickle", "not-a-tiff", write(b"\x80\x04\x95\x00cos\nsystem\n")),
    Bad("three bytes", "not-a-tiff", write(b"II*")),
    Bad("four bytes", "truncated-file", write(b"II*\0")),
    Bad("no directory", "no-image", write(b"II*\0\0\0\0\0")),
    Bad("big header cut", "truncated-file", write(b"II+\0\x08\0\0\0")),
    Bad("directory beyond the end", "truncated-file", write(b"MM\0*\0\x10\0\0" + bytes(40))),
    Bad("directory of no tags", "damaged-file", write(b"II*\0\x08\0\0\0" + bytes(40))),
    Bad("directory of 60000 tags", "damaged-file", write(b"II*\0\x08\0\0\0\x60\xea" + bytes(400))),
    Bad(
        "directory that follows itself",
        "damaged-file",
        write(tiff(grey_tags(4, 4, length=32), bytes(32), following=40)),
    ),
    Bad("directories in a late ring", "damaged-file", write(_loop(300))),
    Bad(
        "tag longer than the file",
        "damaged-file",
        write(tiff({**grey_tags(4, 4, length=32), 270: (2, 2**32 - 1, 8)}, bytes(32))),
    ),
    Bad(
        "strip table beyond the end",
        "truncated-file",
        write(tiff({**grey_tags(4, 4, length=32), 273: (4, 20, 5000)}, bytes(99))),
    ),
    Bad("cut in an uncompressed stack", "truncated-file", cut(0.6, metadata={"axes": "TYX"})),
    Bad("cut in a compressed stack", "truncated-file", cut(0.6, metadata={"axes": "TYX"}, compression="zlib")),
    Bad("cut in a tiled stack", "truncated-file", cut(0.6, metadata={"axes": "TYX"}, tile=(16, 16))),
    Bad("cut in an OME stack", "truncated-file", cut(0.6, metadata={"axes": "TYX"}, ome=True)),
    Bad(
        "cut in a compressed OME stack",
        "truncated-file",
        cut(0.6, metadata={"axes": "TYX"}, ome=True, compression="zlib"),
    ),
    Bad("cut in an ImageJ stack", "truncated-file", cut(0.6, metadata={"axes": "TYX"}, imagej=True)),
    Bad(
        "cut in a single-header ImageJ stack",
        "truncated-file",
        cut(0.6, metadata={"axes": "TYX"}, imagej=True, truncate=True),
    ),
    Bad("cut in a 64-bit stack", "truncated-file", cut(0.6, metadata={"axes": "TYX"}, bigtiff=True)),
    Bad("cut in one plane", "truncated-file", cut(0.9, GREY)),
    Bad("cut by one byte", "truncated-file", cut(0.9999, GREY)),
    Bad("cut in the last directory", "truncated-file", _lost_middle),
    Bad("claims 100000 x 100000", "too-large", write(tiff(grey_tags(100_000, 100_000, length=32), bytes(32)))),
    Bad("claims 4 billion rows", "too-large", write(tiff(grey_tags(1000, 2**32 - 1, length=32), bytes(32)))),
    Bad("claims 200 MB, has 32 bytes", "truncated-file", write(tiff(grey_tags(10_000, 10_000, length=32), bytes(32)))),
    Bad(
        "claims 200 MB in 32 packed bytes",
        "damaged-file",
        write(tiff(grey_tags(9000, 9000, length=32, compression=8), bytes(32))),
    ),
    Bad("no columns", "zero-size", write(tiff(grey_tags(0, 4, length=32), bytes(32)))),
    Bad("no rows", "zero-size", write(tiff(grey_tags(4, 0, length=32), bytes(32)))),
    Bad("7000-bit pixels", "pixel-type", write(tiff(grey_tags(4, 4, length=32, bits=7000), bytes(32)))),
    Bad("zero-bit pixels", "pixel-type", write(tiff(grey_tags(4, 4, length=32, bits=0), bytes(32)))),
    Bad("tiles without data", "missing-tiles", _sparse),
    Bad("tile decodes short", "damaged-file", _short_tile),
    Bad("spoiled packed data", "damaged-file", _spoiled),
    Bad("strip beyond the end", "truncated-file", retagged("StripOffsets", 10**6, compression="zlib")),
    Bad("strip at place 0", "missing-tiles", retagged("StripOffsets", 0, compression="zlib")),
    Bad("unknown compression", "missing-codec", retagged("Compression", 61_234)),
    Bad("RGB", "colour-image", saved(RGB, photometric="rgb")),
    Bad("RGBA", "colour-image", saved(np.zeros((*SHAPE, 4), np.uint8), photometric="rgb", extrasamples=["unassalpha"])),
    Bad(
        "RGB in planes",
        "colour-image",
        saved(np.zeros((3, *SHAPE), np.uint8), photometric="rgb", planarconfig="separate"),
    ),
    Bad("RGB stack of ImageJ", "colour-image", saved(np.zeros((4, *SHAPE, 3), np.uint8), imagej=True)),
    Bad("palette", "colour-image", saved(RGB[..., 0], photometric="palette", colormap=np.zeros((3, 256), np.uint16))),
    Bad(
        "two samples per pixel",
        "colour-image",
        saved(np.zeros((*SHAPE, 2), np.uint16), photometric="minisblack", planarconfig="contig"),
    ),
    Bad("CMYK", "colour-image", saved(np.zeros((*SHAPE, 4), np.uint8), photometric="separated", planarconfig="contig")),
    Bad("black and white", "pixel-type", saved(GREY > 2000)),
    Bad("complex", "pixel-type", saved(GREY.astype(np.complex64))),
    Bad("plain stack", "unnamed-axis", saved(STACK)),
    Bad("plain pages", "unnamed-axis", saved(STACK, metadata=None)),
    Bad("ImageJ stack of unknown order", "unnamed-axis", described("ImageJ=1.54f\nimages=5\n")),
    Bad("two images of different size", "several-images", _two_shapes),
    Bad("OME positions", "several-images", _positions),
    Bad(
        "OME claims a million frames", "missing-planes", ome(lambda text: text.replace('SizeT="5"', 'SizeT="1000000"'))
    ),
    Bad(
        "OME claims 10^17 frames",
        "missing-planes",
        ome(lambda text: text.replace('SizeT="5"', 'SizeT="100000000000000000"')),
    ),
    Bad("OME claims -5 frames", "ome-metadata", ome(lambda text: text.replace('SizeT="5"', 'SizeT="-5"'))),
    Bad("OME claims some frames", "ome-metadata", ome(lambda text: text.replace('SizeT="5"', 'SizeT="some"'))),
    Bad(
        "OME plane count of 10^15",
        "missing-planes",
        ome(lambda text: text.replace('PlaneCount="5"', f'PlaneCount="{10**15}"')),
    ),
    Bad(
        "OME with fewer planes than frames",
        "missing-planes",
        ome(lambda text: text.replace('PlaneCount="5"', 'PlaneCount="3"')),
    ),
    Bad("OME of another size", "truncated-file", ome(lambda text: text.replace('SizeX="64"', 'SizeX="63"'))),
    Bad("OME cut", "ome-metadata", ome(lambda text: text[:200] + "OME>")),
    Bad(
        "OME with entities",
        "ome-metadata",
        ome(lambda text: text.replace("?>", "?>" + BOMB) if "?>" in text else BOMB + text),
    ),
    Bad(
        "OME in other files",
        "several-files",
        ome(
            lambda text: (
                text.replace("</TiffData>", '<UUID FileName="../x.tif">urn:uuid:1</UUID></TiffData>')
                if "</TiffData>" in text
                else text.replace(
                    'PlaneCount="5"/>', 'PlaneCount="5"><UUID FileName="../x.tif">urn:uuid:1</UUID></TiffData>'
                )
            )
        ),
    ),
    Bad(
        "OME that is a part only",
        "several-files",
        described('<OME xmlns="o"><BinaryOnly MetadataFile="all.ome"/></OME>'),
    ),
    Bad(
        "OME with a split axis",
        "ome-metadata",
        ome(
            lambda text: text.replace(
                "</OME>",
                '<StructuredAnnotations><XMLAnnotation ID="a" '
                'Namespace="openmicroscopy.org/omero/dimension/modulo"><Value><Modulo>'
                '<ModuloAlongT Type="phase" Start="0" End="1e12"/></Modulo>'
                "</Value></XMLAnnotation></StructuredAnnotations></OME>",
            )
        ),
    ),
    Bad(
        "ImageJ claims 10^12 frames",
        "truncated-file",
        described("ImageJ=1.54f\nimages=1000000000000\nframes=1000000000000\n"),
    ),
    Bad("ImageJ claims 50 frames of 5", "truncated-file", described("ImageJ=1.54f\nimages=50\nframes=50\n")),
    Bad("own description claims 10^12 frames", "truncated-file", described('{"shape": [1000000000000, 48, 64]}')),
    Bad("own description claims 50 frames of 5", "truncated-file", described('{"shape": [50, 48, 64]}')),
]

SQUARE = [[10, 10], [30, 10], [30, 30], [10, 30], [10, 10]]
OUTLINES = [
    Bad("missing outline", "missing-file", lambda folder: folder / "nowhere.tif"),
    Bad("outline is a pipe", "not-a-file", special("pipe")),
    Bad("outline is a folder", "not-a-file", special("folder")),
    Bad("outline is empty", "empty-file", write(b"", "a.geojson")),
    Bad("outline is text", "outline-format", write(b"x,y\n1,2\n", "a.csv")),
    Bad("outline is a pickle", "outline-format", write(b"\x80\x04\x95\x00cos\nsystem\n", "a.npy")),
    Bad("labels of another size", "outline-shape", saved(np.ones((10, 10), np.uint8))),
    Bad("labels that are not whole", "outline-labels", labels(lambda d: d.__setitem__((5, 5), 0.5), "float32")),
    Bad("labels with NaN", "outline-labels", labels(lambda d: d.__setitem__((5, 5), np.nan), "float32")),
    Bad("negative labels", "outline-labels", labels(lambda d: d.__setitem__((5, 5), -1), "int16")),
    Bad("labels beyond 2^31", "outline-labels", labels(lambda d: d.__setitem__((5, 5), 2**31), "uint32")),
    Bad("no label", "no-outline", labels(lambda d: None)),
    Bad(
        "grey image as labels",
        "outline-labels",
        saved(np.arange(48 * 64 * 4, dtype=np.uint16).reshape(96, 128)[::2, ::2]),
    ),
    Bad("coloured labels", "colour-image", saved(RGB, photometric="rgb")),
    Bad(
        "mask of two areas",
        "outline-labels",
        labels(lambda d: (d.__setitem__((slice(5, 9), 5), 255), d.__setitem__((20, 20), 255)), "uint8"),
    ),
    Bad("label stack without a named axis", "unnamed-axis", saved(STACK % 3)),
    Bad("label stack of heights", "outline-format", saved(STACK % 3, imagej=True, metadata={"axes": "ZYX"})),
    Bad("cut labels", "truncated-file", cut(0.5, GREY % 3)),
    Bad("no JSON", "geojson", write(b"{not json", "a.geojson")),
    Bad(
        "cut JSON",
        "geojson",
        write(json.dumps({"type": "Polygon", "coordinates": [SQUARE]}).encode()[:-9], "a.geojson"),
    ),
    Bad("JSON in another encoding", "geojson", write('{"type": "Zellumriß"}'.encode("latin-1"), "a.geojson")),
    Bad("JSON nested without end", "geojson", write(b"[" * 100_000, "a.geojson")),
    Bad("JSON number", "geojson", write(b"[1, 2, 3]", "a.geojson")),
    Bad("no feature", "no-outline", geo({"type": "FeatureCollection", "features": []})),
    Bad("features missing", "geojson", geo({"type": "FeatureCollection"})),
    Bad("feature without geometry", "geojson", geo({"type": "Feature", "geometry": None})),
    Bad("point", "not-an-area", geo({"type": "Point", "coordinates": [3, 4]})),
    Bad("line", "not-an-area", geo({"type": "LineString", "coordinates": SQUARE})),
    Bad("collection of geometries", "geojson", geo({"type": "GeometryCollection", "geometries": []})),
    Bad("polygon without rings", "bad-polygon", geo({"type": "Polygon", "coordinates": []})),
    Bad("polygon of words", "bad-polygon", polygons([["a", "b"], ["c", "d"], ["e", "f"]])),
    Bad("polygon of numbers", "bad-polygon", polygons([1, 2, 3])),
    Bad("polygon of two points", "bad-polygon", polygons([[1, 1], [9, 9]])),
    Bad("polygon on a line", "bad-polygon", polygons([[1, 1], [5, 5], [9, 9], [1, 1]])),
    Bad("polygon that crosses itself", "bad-polygon", polygons([[10, 10], [30, 30], [30, 10], [10, 30]])),
    Bad(
        "polygon with NaN",
        "geojson",
        write(b'{"type": "Polygon", "coordinates": [[[NaN, 1], [2, 3], [4, 1]]]}', "a.geojson"),
    ),
    Bad("polygon at the end of the world", "bad-polygon", polygons([[0, 0], [1e300, 0], [0, 1e300]])),
    Bad("polygon in micrometres from elsewhere", "outline-outside", polygons([[900, 900], [990, 900], [990, 990]])),
    Bad("polygon between the pixels", "bad-polygon", polygons([[5.1, 5.1], [5.4, 5.1], [5.4, 5.4]])),
    Bad("polygons on top of each other", "outline-overlap", polygons(SQUARE, SQUARE)),
    Bad("number used twice", "outline-numbers", polygons(SQUARE, [[40, 10], [50, 10], [50, 20]], id=1)),
    Bad("cut region", "damaged-file", write(region("POLYGON")[:40], "a.roi")),
    Bad("region with another start", "outline-format", write(b"Jout" + region("POLYGON")[4:], "a.roi")),
    Bad("line region", "not-an-area", write(region("LINE"), "a.roi")),
    Bad("point region", "not-an-area", write(region("POINT"), "a.roi")),
    Bad("region of no size", "bad-polygon", write(region("RECT", right=10), "a.roi")),
    Bad("text region", "not-an-area", write(region("RECT", subtype=roifile.ROI_SUBTYPE.TEXT), "a.roi")),
    Bad("rounded rectangle", "roi", write(region("RECT", rounded_rect_arc_size=5), "a.roi")),
    Bad("zip without regions", "roi", zip_of({"readme.txt": b"hello"})),
    Bad("zip of something else", "roi", zip_of({"a.roi": b"not a region at all" * 9})),
    Bad("zip that swells", "too-large", zip_of({"a.roi": b"Iout" + bytes(64 * 2**20)})),
    Bad("broken zip", "damaged-file", write(b"PK\x03\x04" + bytes(200), "a.zip")),
    Bad("encrypted zip", "damaged-file", lambda folder: _encrypted(folder)),
    Bad(
        "regions of two frames", "several-frames", zip_of({f"{i}.roi": region("POLYGON", t_position=i) for i in (1, 2)})
    ),
    Bad("auto of nothing", "outline-format", lambda folder: "auto:"),
    Bad("auto of a missing image", "missing-file", lambda folder: f"auto:{folder}/nowhere.tif"),
    Bad("auto of a pipe", "not-a-file", lambda folder: f"auto:{special('pipe')(folder)}"),
    Bad("auto of a text", "not-a-tiff", lambda folder: f"auto:{write(b'no pixels at all')(folder)}"),
    Bad("auto of noise", "no-cell-found", lambda folder: f"auto:{saved(GREY)(folder)}"),
    Bad(
        "auto of a uniform image", "no-cell-found", lambda folder: f"auto:{saved(np.full(SHAPE, 9, np.uint8))(folder)}"
    ),
    Bad("auto of NaN", "not-finite", lambda folder: f"auto:{saved(np.full(SHAPE, np.nan, np.float32))(folder)}"),
    Bad(
        "auto of several channels",
        "outline-format",
        lambda folder: f"auto:{saved(STACK, imagej=True, metadata={'axes': 'CYX'})(folder)}",
    ),
    Bad("auto of colour", "colour-image", lambda folder: f"auto:{saved(RGB, photometric='rgb')(folder)}"),
]


def _encrypted(folder: Path) -> Path:
    """The flag of encryption set on a plain entry (bit 0 of the general-purpose flags, in both headers)."""
    path = zip_of({"a.roi": region("POLYGON")})(folder)
    content = bytearray(path.read_bytes())
    content[6] |= 1
    content[content.index(b"PK\x01\x02") + 8] |= 1
    path.write_bytes(content)
    return path
