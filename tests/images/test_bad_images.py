"""The corpus of bad images and outlines: each gets its code, one line with a remedy, no traceback, no number."""

from __future__ import annotations

import importlib.util
import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import tifffile
from hypothesis import given, settings
from hypothesis import strategies as st

from tfm.errors import InputError, MeasurementError, TfmError
from tfm.images import image_faults, open_frames, read_outlines

HERE = Path(__file__).parent
ROOT = HERE.parents[1]
# The test folders are no packages; the corpus is loaded by its place.
_SPEC = importlib.util.spec_from_file_location("tfm_bad_images", HERE / "corpus.py")
assert _SPEC is not None
assert _SPEC.loader is not None
corpus = importlib.util.module_from_spec(_SPEC)
sys.modules["tfm_bad_images"] = corpus
_SPEC.loader.exec_module(corpus)


def check_refusal(error: TfmError, code: str, given: object, capfd: pytest.CaptureFixture[str]) -> None:
    text = str(error)
    assert error.code == code, text
    assert "\n" not in text
    assert len(text) < 700
    assert text.isprintable()
    assert error.remedy
    assert "Traceback" not in text
    name = Path(str(given).removeprefix("auto:").replace("\0", "\\0")).name
    if name:
        assert name[-60:] in error.file
    out, err = capfd.readouterr()
    assert (out, err) == ("", "")


@pytest.mark.parametrize("bad", corpus.IMAGES, ids=lambda bad: bad.name)
def test_bad_image(
    bad: object, tmp_path: Path, capfd: pytest.CaptureFixture[str], caplog: pytest.LogCaptureFixture
) -> None:
    path = bad.make(tmp_path)  # type: ignore[attr-defined]
    with pytest.raises((InputError, MeasurementError)) as error:
        open_frames(path).frame()
    check_refusal(error.value, bad.code, path, capfd)  # type: ignore[attr-defined]
    assert not caplog.records


@pytest.mark.parametrize("bad", corpus.OUTLINES, ids=lambda bad: bad.name)
def test_bad_outline(
    bad: object, tmp_path: Path, capfd: pytest.CaptureFixture[str], caplog: pytest.LogCaptureFixture
) -> None:
    text = str(bad.make(tmp_path))  # type: ignore[attr-defined]
    with pytest.raises((InputError, MeasurementError)) as error:
        read_outlines(text, corpus.SHAPE, base="/nowhere")
    check_refusal(error.value, bad.code, text, capfd)  # type: ignore[attr-defined]
    assert not caplog.records


def test_the_corpus_is_as_large_as_promised() -> None:
    names = [bad.name for bad in corpus.IMAGES + corpus.OUTLINES]
    assert len(names) == len(set(names))
    assert len(names) >= 120


RNG = np.random.default_rng(5)
BEADS = RNG.integers(100, 900, (64, 64)).astype(float)


def spoiled(value: float, share: float = 0.01) -> np.ndarray:
    frame = BEADS.copy()
    frame.flat[: int(share * frame.size)] = value
    return frame


@pytest.mark.parametrize(
    ("frame", "level", "codes", "fatal"),
    [
        (BEADS, 65535.0, [], False),
        (spoiled(np.nan), None, ["not-finite"], True),
        (spoiled(np.inf), None, ["not-finite"], True),
        (np.full((64, 64), np.nan), None, ["not-finite"], True),
        (np.zeros((64, 64)), None, ["constant-image"], True),
        (np.full((64, 64), 512.0), None, ["constant-image"], True),
        (spoiled(65535.0), 65535.0, ["saturated"], False),
        (spoiled(4095.0), 65535.0, ["saturated"], False),  # a 12-bit camera in a 16-bit file
        (spoiled(4095.0, 0.0003), 65535.0, [], False),  # one hot pixel
        ((BEADS > 500).astype(float), None, ["few-levels", "saturated"], False),
        (BEADS[:20], None, ["too-small"], True),
        (BEADS[:, :1], None, ["too-small"], True),
    ],
)
def test_faults_of_a_readable_frame(frame: np.ndarray, level: float | None, codes: list[str], fatal: bool) -> None:
    faults = image_faults(frame, saturation_level=level)
    assert [fault.code for fault in faults] == codes
    assert any(fault.fatal for fault in faults) == fatal
    assert all(fault.sentence and "\n" not in fault.sentence for fault in faults)


def test_stack_without_a_finite_plane_has_no_sharpest(tmp_path: Path) -> None:
    data = np.full((3, 40, 40), np.nan, np.float32)
    tifffile.imwrite(tmp_path / "a.tif", data, imagej=True, metadata={"axes": "ZYX"})
    with pytest.raises(MeasurementError) as error:
        open_frames(tmp_path / "a.tif").frame()
    assert error.value.code == "not-finite"


@pytest.mark.parametrize("compression", [None, "zlib"])
def test_file_that_shrinks_after_it_was_opened(tmp_path: Path, compression: str | None) -> None:
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, corpus.STACK, metadata={"axes": "TYX"}, compression=compression, photometric="minisblack")
    stack = open_frames(path)
    path.write_bytes(path.read_bytes()[:9000])
    with pytest.raises(MeasurementError) as error:
        stack.frame(4)
    assert error.value.code in ("truncated-file", "damaged-file")
    path.unlink()
    with pytest.raises(InputError) as gone:
        stack.frame(4)
    assert gone.value.code == "missing-file"


@pytest.mark.parametrize("options", [{"compression": "lzw"}, {"compression": "zlib", "predictor": True}], ids=str)
def test_codec_that_is_not_installed_names_the_extra(tmp_path: Path, options: dict[str, object]) -> None:
    tifffile.imwrite(tmp_path / "a.tif", corpus.GREY, **options)  # type: ignore[arg-type]
    # A fresh interpreter in which imagecodecs cannot be imported, as on a machine without the extra.
    script = """
import sys
sys.modules["imagecodecs"] = None
from tfm.errors import InputError
from tfm.images import open_frames
try:
    frame = open_frames(sys.argv[1]).frame()
    print("read", int(frame.sum()))
except InputError as error:
    print(error.code, error)
"""
    done = run(script, str(tmp_path / "a.tif"))
    if options["compression"] == "lzw":
        assert done.startswith("missing-codec")
        assert "tugtensor[codecs]" in done
    else:
        assert done.startswith(("missing-codec", f"read {int(corpus.GREY.sum())}"))


def run(script: str, *arguments: str) -> str:
    done = subprocess.run(
        [sys.executable, "-c", script, *arguments], capture_output=True, text=True, check=True, cwd=ROOT, timeout=60
    )
    assert done.stderr == ""
    return done.stdout.strip()


def test_claims_of_terabytes_are_refused_under_a_memory_cap(tmp_path: Path) -> None:
    names = [
        "claims 100000 x 100000",
        "claims 4 billion rows",
        "claims 200 MB, has 32 bytes",
        "OME claims 10^17 frames",
        "OME plane count of 10^15",
        "OME with entities",
        "OME with a split axis",
        "ImageJ claims 10^12 frames",
        "own description claims 10^12 frames",
        "tag longer than the file",
        "zip that swells",
        "JSON nested without end",
    ]
    cases = {}
    for bad in corpus.IMAGES + corpus.OUTLINES:
        if bad.name in names:
            folder = tmp_path / str(len(cases))
            folder.mkdir()
            cases[str(bad.make(folder))] = (bad.code, bad in corpus.OUTLINES)
    assert len(cases) == len(names)
    script = """
import json, resource, sys
import imagecodecs, roifile
from tfm.errors import TfmError
from tfm.images import open_frames, read_outlines
pages = int(open("/proc/self/statm").read().split()[0])
cap = pages * resource.getpagesize() + 256 * 2**20
resource.setrlimit(resource.RLIMIT_AS, (cap, cap))
found = {}
for path, outline in json.loads(sys.argv[1]).items():
    try:
        read_outlines(path, (48, 64)) if outline else open_frames(path).frame()
    except TfmError as error:
        found[path] = error.code
print(json.dumps(found))
"""
    found = json.loads(run(script, json.dumps({path: outline for path, (_, outline) in cases.items()})))
    assert found == {path: code for path, (code, _) in cases.items()}


def test_packed_strip_that_swells_is_stopped_without_imagecodecs(tmp_path: Path) -> None:
    import zlib

    bomb = zlib.compress(bytes(200 * 2**20), 1)  # 200 MB in 0.9 MB
    path = tmp_path / "bomb.tif"
    path.write_bytes(corpus.tiff(corpus.grey_tags(64, 48, length=len(bomb), compression=8), bomb))
    script = """
import resource, sys
sys.modules["imagecodecs"] = None
from tfm.errors import TfmError
from tfm.images import open_frames
pages = int(open("/proc/self/statm").read().split()[0])
cap = pages * resource.getpagesize() + 100 * 2**20
resource.setrlimit(resource.RLIMIT_AS, (cap, cap))
try:
    open_frames(sys.argv[1]).frame()
except TfmError as error:
    print(error.code, error.message)
"""
    assert run(script, str(path)).startswith("damaged-file a strip unpacks to more than its place")


GOOD: dict[str, tuple[bytes, np.ndarray]] = {}


def good_files() -> dict[str, tuple[bytes, np.ndarray]]:
    """A few sound files whose bytes the fuzz tests spoil; made once."""
    if not GOOD:
        import io

        small = corpus.STACK[:, :16, :16]
        for name, options in {
            "ome": {"ome": True, "metadata": {"axes": "TYX", "PhysicalSizeX": 0.2}},
            "ome-zlib": {"ome": True, "metadata": {"axes": "TYX"}, "compression": "zlib"},
            "imagej": {
                "imagej": True,
                "metadata": {"axes": "TYX", "unit": "um", "finterval": 2.0},
                "resolution": (5, 5),
            },
            "plain": {"metadata": {"axes": "TYX"}},
            "tiled": {"metadata": {"axes": "TYX"}, "tile": (16, 16), "compression": "lzw"},
            "big": {"metadata": {"axes": "TYX"}, "bigtiff": True, "byteorder": ">"},
        }.items():
            buffer = io.BytesIO()
            tifffile.imwrite(buffer, small, photometric="minisblack", **options)
            GOOD[name] = (buffer.getvalue(), small)
    return GOOD


@settings(derandomize=True, deadline=None, max_examples=300, database=None)
@given(st.data())
def test_flipped_bytes_give_an_image_or_an_error_of_ours(
    tmp_path_factory: pytest.TempPathFactory, data: st.DataObject
) -> None:
    name = data.draw(st.sampled_from(sorted(good_files())))
    content = bytearray(good_files()[name][0])
    # most of the harm is in the header and the directories, so half of the flips go there
    places = st.one_of(
        st.integers(0, 400), st.integers(0, len(content) - 1), st.integers(len(content) - 1200, len(content) - 1)
    )
    for place in data.draw(st.lists(places, min_size=1, max_size=8)):
        content[max(0, min(place, len(content) - 1))] = data.draw(st.integers(0, 255))
    path = tmp_path_factory.getbasetemp() / "flipped.tif"
    path.write_bytes(content)
    check_fuzzed(path)


@settings(derandomize=True, deadline=None, max_examples=150, database=None)
@given(st.data())
def test_cut_bytes_never_give_fewer_frames(tmp_path_factory: pytest.TempPathFactory, data: st.DataObject) -> None:
    name = data.draw(st.sampled_from(sorted(good_files())))
    content, frames = good_files()[name]
    path = tmp_path_factory.getbasetemp() / "cut.tif"
    path.write_bytes(content[: data.draw(st.integers(0, len(content) - 1))])
    stack = check_fuzzed(path)
    # What may be missing without harm is what no reader needs: then all frames are there, and right.
    if stack is not None:
        assert stack.n_frames == len(frames)
        for t, frame in enumerate(frames):
            np.testing.assert_array_equal(stack.frame(t), frame)


def check_fuzzed(path: Path) -> object:
    message, stack = "", None
    try:
        opened = open_frames(path)
        for t in {0, opened.n_frames - 1}:
            assert opened.frame(t).shape == opened.shape
        stack = opened
    except TfmError as error:
        message = str(error)
        assert error.code  # noqa: PT017
    assert "\n" not in message
    assert message.isprintable()
    return stack
