"""Bead stacks against files written by an independent writer (tifffile) and images that registry packages carry."""

from __future__ import annotations

import itertools
import pickle
import re
import struct
import subprocess
import sys
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest
import tifffile
from scipy import ndimage

from tfm.errors import InputError
from tfm.images import BeadStack, focus_measure, image_faults, matching_shape, open_frames, resolve_pixel_size


def numbered(*lengths: int, shape: tuple[int, int] = (40, 48), dtype: str = "uint16") -> np.ndarray:
    """A stack whose every pixel names its own position, so that no two planes can be confused."""
    values = np.arange(int(np.prod(lengths, dtype=int)) * shape[0] * shape[1]) % 60_000
    return values.reshape(*lengths, *shape).astype(dtype)


@pytest.mark.parametrize("order", ["".join(p) for p in itertools.permutations("TZC")])
@pytest.mark.parametrize("compression", [None, "zlib"])
def test_ome_axes_in_any_order(tmp_path: Path, order: str, compression: str | None) -> None:
    lengths = {"T": 3, "Z": 4, "C": 2}
    data = numbered(*(lengths[a] for a in order))
    path = tmp_path / "stack.ome.tif"
    tifffile.imwrite(
        path, data, ome=True, metadata={"axes": order + "YX"}, compression=compression, photometric="minisblack"
    )
    stack = open_frames(path)
    assert (stack.n_frames, stack.n_planes, stack.n_channels) == (3, 4, 2)
    assert stack.shape == (40, 48)
    for t, z, c in itertools.product(range(3), range(4), range(2)):
        position = {"T": t, "Z": z, "C": c}
        expected = data[tuple(position[a] for a in order)]
        np.testing.assert_array_equal(stack.frame(t, channel=c, plane=z), expected)


@pytest.mark.parametrize("byteorder", ["<", ">"])
@pytest.mark.parametrize("bigtiff", [False, True])
@pytest.mark.parametrize("dtype", ["uint8", "uint16", "int16", "uint32", "float16", "float32", "float64"])
def test_every_grey_type_and_byte_order(tmp_path: Path, dtype: str, byteorder: str, bigtiff: bool) -> None:
    data = (np.random.default_rng(1).random((40, 48)) * 200).astype(dtype)
    path = tmp_path / "one.tif"
    tifffile.imwrite(path, data, byteorder=byteorder, bigtiff=bigtiff)
    stack = open_frames(path)
    frame = stack.frame()
    assert frame.dtype == np.float32
    assert frame.flags.writeable
    assert stack.dtype == dtype
    np.testing.assert_array_equal(frame, data.astype(np.float32))


@pytest.mark.parametrize(
    "options",
    [
        {"compression": "zlib", "predictor": True},
        {"compression": "lzw"},
        {"compression": "zstd", "tile": (16, 32)},
        {"tile": (16, 16)},
        {"rowsperstrip": 7},
        {"compression": "zlib", "rowsperstrip": 7},
        {"compression": "packbits"},
        {"compression": "lzma"},
    ],
    ids=str,
)
def test_strips_tiles_and_codecs(tmp_path: Path, options: dict[str, object]) -> None:
    data = numbered(5)
    path = tmp_path / "stack.tif"
    tifffile.imwrite(path, data, metadata={"axes": "TYX"}, **options)  # type: ignore[arg-type]
    stack = open_frames(path)
    for t in range(5):
        np.testing.assert_array_equal(stack.frame(t), data[t])


@pytest.mark.parametrize("truncate", [False, True])
def test_imagej_hyperstack_and_the_single_header_form_of_large_files(tmp_path: Path, truncate: bool) -> None:
    # ImageJ writes one directory only for stacks above 4 GB; tifffile writes that form with truncate=True.
    data = numbered(3, 2, 2)
    path = tmp_path / "hyper.tif"
    meta = {"axes": "TZCYX", "unit": "\\u00B5m", "finterval": 12.5}
    tifffile.imwrite(path, data, imagej=True, resolution=(8.0, 8.0), metadata=meta, truncate=truncate)
    stack = open_frames(path)
    assert (stack.axes, stack.n_frames, stack.n_planes, stack.n_channels) == ("TZCYX", 3, 2, 2)
    assert stack.pixel_size == pytest.approx(0.125e-6, rel=1e-9)
    assert stack.frame_interval == 12.5
    assert stack.origin == "ImageJ"
    np.testing.assert_array_equal(stack.frame(2, channel=1, plane=0), data[2, 0, 1])


def test_renamed_ome_file_that_knows_itself(tmp_path: Path) -> None:
    # Bio-Formats writes the file's name beside its identifier; renaming the file must not orphan its own planes.
    path = tmp_path / "new name.ome.tif"
    data = numbered(5)
    tifffile.imwrite(path, data, ome=True, metadata={"axes": "TYX"})
    own = "urn:uuid:11111111-2222-3333-4444-555555555555"
    with tifffile.TiffFile(path, mode="r+b") as tif:
        text = tif.pages[0].description
        text = re.sub(r'UUID="[^"]*"', f'UUID="{own}"', text, count=1)
        text = re.sub(r"<TiffData([^>]*)/>", rf'<TiffData\1><UUID FileName="old.ome.tif">{own}</UUID></TiffData>', text)
        assert text.count(own) == 2
        tif.pages[0].tags["ImageDescription"].overwrite(text.encode())
    stack = open_frames(path)
    assert stack.n_frames == 5
    np.testing.assert_array_equal(stack.frame(4), data[4])


def test_smaller_copies_of_a_pyramid_are_left_alone(tmp_path: Path) -> None:
    data = numbered(3, shape=(128, 128))
    path = tmp_path / "pyramid.ome.tif"
    options = {"photometric": "minisblack", "tile": (32, 32), "compression": "zlib"}
    with tifffile.TiffWriter(path, ome=True) as writer:
        writer.write(data, subifds=1, metadata={"axes": "TYX"}, **options)  # type: ignore[arg-type]
        writer.write(data[:, ::2, ::2], subfiletype=1, **options)  # type: ignore[arg-type]
    stack = open_frames(path)
    assert (stack.n_frames, stack.shape) == (3, (128, 128))
    for t in range(3):
        np.testing.assert_array_equal(stack.frame(t), data[t])


def test_volumetric_pages_hold_several_planes(tmp_path: Path) -> None:
    data = numbered(16, shape=(32, 32))
    path = tmp_path / "volume.tif"
    tifffile.imwrite(path, data, volumetric=True, tile=(16, 16, 16), compression="zlib", photometric="minisblack")
    stack = open_frames(path)
    assert stack.n_planes == 16
    np.testing.assert_array_equal(stack.frame(plane=9), data[9])


def test_plain_stack_is_asked_about_and_can_be_named(tmp_path: Path) -> None:
    data = numbered(6)
    shaped, plain = tmp_path / "shaped.tif", tmp_path / "plain.tif"
    tifffile.imwrite(shaped, data)
    tifffile.imwrite(plain, data, metadata=None)
    planar = tmp_path / "planar.tif"
    tifffile.imwrite(planar, data[:4], photometric="minisblack", planarconfig="separate", metadata=None)
    for path, n in ((shaped, 6), (plain, 6), (planar, 4)):
        with pytest.raises(InputError, match=f"does not say what its {n} planes are") as error:
            open_frames(path)
        assert error.value.code == "unnamed-axis"
        for axes in ("T", "TYX", "tyx"):
            stack = open_frames(path, axes=axes)
            assert (stack.n_frames, stack.n_planes) == (n, 1)
            np.testing.assert_array_equal(stack.frame(n - 1), data[n - 1])
        assert open_frames(path, axes="Z").n_planes == n
        for wrong in ("TZ", "", "Q", "TT", "YX"):
            with pytest.raises(InputError) as error:
                open_frames(path, axes=wrong)
            assert error.value.code == "unknown-axes"


def test_three_planes_that_a_writer_calls_rgb(tmp_path: Path) -> None:
    data = numbered(3)
    for name, meta in (("told", {"axes": "TYX"}), ("mute", None)):
        tifffile.imwrite(tmp_path / f"{name}.tif", data, metadata=meta, photometric="rgb", planarconfig="separate")
    np.testing.assert_array_equal(open_frames(tmp_path / "told.tif").frame(2), data[2])
    with pytest.raises(InputError) as error:
        open_frames(tmp_path / "mute.tif")
    assert error.value.code == "colour-image"
    np.testing.assert_array_equal(open_frames(tmp_path / "mute.tif", axes="T").frame(2), data[2])


def test_multipage_image_of_scikit_image_is_asked_about() -> None:
    # A plain two-page TIFF inside the scikit-image wheel.
    path = str(files("skimage.data") / "multipage.tif")
    with pytest.raises(InputError) as error:
        open_frames(path)
    assert error.value.code == "unnamed-axis"
    expected = tifffile.imread(path)
    stack = open_frames(path, axes="T")
    np.testing.assert_array_equal(stack.frame(1), expected[1])
    with pytest.raises(InputError) as error:
        open_frames(str(files("skimage.data") / "multipage_rgb.tif"))
    assert error.value.code == "colour-image"


def test_real_piv_pair_of_the_openpiv_wheel() -> None:
    # 2304 x 1720 bead-like images that OpenPIV's wheel carries (test4); pixel values against its own reader.
    from openpiv import tools

    for name in ("Camera1-0101.tif", "Camera1-0102.tif"):
        path = str(files("openpiv") / "data" / "test4" / name)
        stack = open_frames(path)
        frame = stack.frame()
        assert frame.shape == stack.shape
        np.testing.assert_array_equal(frame, np.asarray(tools.imread(path), dtype=np.float32))
        assert not [fault for fault in image_faults(frame, saturation_level=stack.saturation_level) if fault.fatal]


def test_planes_sharpest_max_and_number(tmp_path: Path) -> None:
    rng = np.random.default_rng(2)
    beads = np.zeros((64, 64))
    beads[rng.integers(4, 60, 60), rng.integers(4, 60, 60)] = 2000.0
    blurs = [4.0, 2.5, 1.2, 2.0, 3.5]
    # The plane in focus is not the one with the noisiest camera background.
    data = np.stack([ndimage.gaussian_filter(beads, b) for b in blurs]) + 100 + rng.normal(0, 2, (5, 64, 64))
    path = tmp_path / "focus.tif"
    tifffile.imwrite(path, data.astype(np.float32), imagej=True, metadata={"axes": "ZYX"})
    stack = open_frames(path)
    assert stack.sharpest_plane() == 2
    np.testing.assert_array_equal(stack.frame(), stack.frame(plane=2))
    np.testing.assert_array_equal(stack.frame(plane="max"), data.astype(np.float32).max(axis=0))


def test_focus_measure_falls_with_blur_monotonically() -> None:
    rng = np.random.default_rng(3)
    image = rng.random((96, 96))
    scores = [focus_measure(ndimage.gaussian_filter(image, s)) for s in (0.0, 0.7, 1.5, 3.0)]
    assert scores == sorted(scores, reverse=True)
    assert np.isnan(focus_measure(np.full((8, 8), np.nan)))


def test_minimum_is_white_is_turned_round(tmp_path: Path) -> None:
    data = numbered(1)[0].astype(np.uint8)
    path = tmp_path / "white.tif"
    tifffile.imwrite(path, data, photometric="miniswhite")
    np.testing.assert_array_equal(open_frames(path).frame(), 255 - data.astype(np.float32))


@pytest.mark.parametrize("plane", ["sharp", "middle", "", "0"])
def test_unknown_plane_word(tmp_path: Path, plane: str) -> None:
    tifffile.imwrite(tmp_path / "a.tif", numbered(1)[0])
    with pytest.raises(InputError, match="sharpest, max or a plane number"):
        open_frames(tmp_path / "a.tif").frame(plane=plane)


@pytest.mark.parametrize(
    ("call", "code"),
    [
        ({"t": 1}, "no-such-frame"),
        ({"t": -1}, "no-such-frame"),
        ({"channel": 1}, "no-such-channel"),
        ({"plane": 5}, "no-such-plane"),
        ({"plane": True}, "no-such-plane"),
        ({"t": 0.5}, "no-such-frame"),
    ],
)
def test_positions_outside_the_stack(tmp_path: Path, call: dict[str, object], code: str) -> None:
    tifffile.imwrite(tmp_path / "a.tif", numbered(1)[0])
    with pytest.raises(InputError) as error:
        open_frames(tmp_path / "a.tif").frame(**call)  # type: ignore[arg-type]
    assert error.value.code == code


def test_stack_survives_the_way_to_another_process(tmp_path: Path) -> None:
    data = numbered(3)
    tifffile.imwrite(tmp_path / "a.tif", data, metadata={"axes": "TYX"}, compression="zlib", photometric="minisblack")
    stack = pickle.loads(pickle.dumps(open_frames(tmp_path / "a.tif")))
    np.testing.assert_array_equal(stack.frame(2), data[2])


def test_memory_does_not_grow_with_the_number_of_frames(tmp_path: Path) -> None:
    script = """
import resource, sys
from tfm.images import open_frames
stack = open_frames(sys.argv[1])
before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
for t in range(stack.n_frames):
    stack.frame(t)
print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before)
"""
    grown = {}
    for compression in (None, "zlib"):
        path = tmp_path / f"long-{compression}.tif"
        # 100 frames of 2 MB: 200 MB as a whole.
        with tifffile.TiffWriter(path, ome=True) as writer:
            writer.write(
                (np.full((1024, 1024), t, dtype=np.uint16) for t in range(100)),
                shape=(100, 1024, 1024),
                dtype=np.uint16,
                metadata={"axes": "TYX"},
                compression=compression,
                maxworkers=1,
            )
        done = subprocess.run(
            [sys.executable, "-c", script, str(path)],
            capture_output=True,
            text=True,
            check=True,
            cwd=Path(__file__).parents[2],
        )
        grown[compression] = int(done.stdout) / 1024
    # kB: two planes as stored and as float32 are 12 MB; the stack is 200 MB.
    assert max(grown.values()) < 40, grown


def as_stack(tmp_path: Path, name: str, **options: object) -> BeadStack:
    path = tmp_path / f"{name}.tif"
    tifffile.imwrite(path, numbered(1)[0], **options)  # type: ignore[arg-type]
    return open_frames(path)


def in_um(size: float | tuple[float, float]) -> dict[str, object]:
    x, y = size if isinstance(size, tuple) else (size, size)
    meta = {"axes": "YX", "PhysicalSizeX": x, "PhysicalSizeY": y, "PhysicalSizeXUnit": "µm", "PhysicalSizeYUnit": "µm"}
    return {"ome": True, "metadata": meta}


def test_pixel_size_from_file_first_then_sheet(tmp_path: Path) -> None:
    known = as_stack(tmp_path, "known", **in_um(0.2))
    mute = as_stack(tmp_path, "mute")
    assert mute.pixel_size is None
    assert resolve_pixel_size([known, mute]) == pytest.approx(2e-7, rel=1e-12)
    assert resolve_pixel_size([mute], 3e-7) == 3e-7
    # within 1 % the file's number stands
    assert resolve_pixel_size([known], 2.01e-7) == pytest.approx(2e-7, rel=1e-12)


def test_pixel_size_conflicts_name_both_numbers(tmp_path: Path) -> None:
    known = as_stack(tmp_path, "known", **in_um(0.2))
    other = as_stack(tmp_path, "other", **in_um(0.21))
    with pytest.raises(InputError, match=r"0\.2 um here, 0\.21 um in .*other") as error:
        resolve_pixel_size([known, other])
    assert error.value.code == "pixel-size-conflict"
    with pytest.raises(InputError, match=r"0\.2 um here, 0\.203 um in the cell sheet"):
        resolve_pixel_size([known], 2.03e-7)


def test_pixel_size_refusals(tmp_path: Path) -> None:
    mute = as_stack(tmp_path, "mute")
    with pytest.raises(InputError) as error:
        resolve_pixel_size([mute])
    assert error.value.code == "no-pixel-size"
    oblong = as_stack(tmp_path, "oblong", **in_um((0.2, 0.25)))
    with pytest.raises(InputError, match=r"not square \(0\.2 um x 0\.25 um\)") as error:
        resolve_pixel_size([oblong])
    assert error.value.code == "non-square-pixels"
    for value in (0.2, 0.0, -2e-7, float("nan"), float("inf"), 1e-3):
        with pytest.raises(InputError) as error:
            resolve_pixel_size([mute], value)
        assert error.value.code == "implausible-pixel-size"


def test_frames_of_different_size_do_not_match(tmp_path: Path) -> None:
    a = as_stack(tmp_path, "a")
    tifffile.imwrite(tmp_path / "b.tif", np.zeros((40, 47), np.uint8))
    with pytest.raises(InputError, match="48 x 40 pixels and the relaxed one 47 x 40"):
        matching_shape(a, open_frames(tmp_path / "b.tif"))
    assert matching_shape(a, a) == (40, 48)


def test_saturation_level_follows_the_cameras_bits(tmp_path: Path) -> None:
    assert as_stack(tmp_path, "plain").saturation_level == 65535
    assert as_stack(tmp_path, "bits", ome=True, metadata={"axes": "YX", "SignificantBits": 12}).saturation_level == 4095
    tifffile.imwrite(tmp_path / "f.tif", np.zeros((4, 4), np.float32))
    assert open_frames(tmp_path / "f.tif").saturation_level is None


def test_twelve_bit_packed_camera_file(tmp_path: Path) -> None:
    # 12-bit samples packed two in three bytes, as some cameras store them (TIFF 6.0 allows any BitsPerSample).
    data = np.random.default_rng(4).integers(0, 4096, (16, 32))
    bits = "".join(f"{v:012b}" for v in data.ravel())
    packed = bytes(int(bits[i : i + 8], 2) for i in range(0, len(bits), 8))
    tags = [(256, 3, 32), (257, 3, 16), (258, 3, 12), (259, 3, 1), (262, 3, 1), (273, 4, 8), (277, 3, 1), (278, 3, 16)]
    tags.append((279, 4, len(packed)))
    ifd = struct.pack("<H", len(tags)) + b"".join(
        struct.pack("<HHI", tag, kind, 1) + struct.pack("<I", value) for tag, kind, value in tags
    )
    path = tmp_path / "packed.tif"
    path.write_bytes(b"II*\0" + struct.pack("<I", 8 + len(packed)) + packed + ifd + struct.pack("<I", 0))
    stack = open_frames(path)
    assert stack.saturation_level == 4095
    np.testing.assert_array_equal(stack.frame(), data)
