"""The page on images lists every code that this room can raise, and tells the size of the corpus truly."""

from __future__ import annotations

import re
from pathlib import Path

import tfm.images

ROOT = Path(__file__).parents[2]


def test_every_code_is_in_the_page_and_no_other() -> None:
    sources = "".join(path.read_text(encoding="utf-8") for path in (ROOT / "tfm" / "images").glob("*.py"))
    raised = set(re.findall(r'code="([a-z-]+)"', sources)) | set(re.findall(r'ImageFault\("([a-z-]+)"', sources))
    raised |= {"no-such-frame", "no-such-plane", "no-such-channel"}  # composed at run time
    page = (ROOT / "docs" / "images.md").read_text(encoding="utf-8")
    table = page[page.index("| code |") :]
    listed = set(
        re.findall(r"`([a-z-]+)`", "".join(line.split("|")[1] for line in table.splitlines() if line.startswith("|")))
    )
    raised |= {"zero-size", "bad-polygon"}  # the other branch of a conditional
    assert listed == raised


def test_size_of_the_corpus() -> None:
    page = (ROOT / "docs" / "images.md").read_text(encoding="utf-8")
    text = (ROOT / "tests" / "images" / "corpus.py").read_text(encoding="utf-8")
    told = re.search(r"corpus of (\d+) bad files", page)
    assert told is not None
    assert int(told.group(1)) == len(re.findall(r"^ {4}Bad\(", text, flags=re.MULTILINE))


def test_public_names() -> None:
    assert set(tfm.images.__all__) == {
        "BeadStack", "ImageFault", "LabelFollower", "OutlineStack", "Outlines", "cells_cut_by_edge", "focus_measure",
        "follow_labels", "image_faults", "matching_shape", "open_frames", "propose_outline", "read_outline_stack",
        "read_outlines", "resolve_pixel_size", "touching_groups",
    }  # fmt: skip
    assert all(getattr(tfm.images, name).__doc__ for name in tfm.images.__all__)
