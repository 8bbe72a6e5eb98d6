"""Writes the table of bad inputs in docs/reliability.md from the cases that the tests hold; run as a script."""

from __future__ import annotations

import importlib.util
import sys
from collections import Counter
from pathlib import Path
from types import ModuleType

HERE = Path(__file__).parent
PAGE = HERE.parents[1] / "docs" / "reliability.md"
BEGIN, END = "<!-- cases: begin -->", "<!-- cases: end -->"

MEANING = {
    "absolute-path": "a path that is not relative to the sheet",
    "bad-name": "a field name that is too long or holds characters that cannot be shown",
    "bad-number": "text where a number belongs (`n/a`, `#REF!`, `inf`, words)",
    "bad-path": "a path with a control character",
    "bad-polygon": "polygons of too few points, on a line, crossing themselves, with NaN",
    "bad-quotes": "quotation marks that do not match",
    "bad-shape": "an array of the wrong shape",
    "bare-number": "a quantity without its unit",
    "colour-image": "RGB, palette and other colour images",
    "damaged-file": "a file that is not what it claims inside",
    "decimal-comma": "a decimal comma",
    "duplicate-column": "a column that stands twice",
    "duplicate-field": "two fields of one name, or of two spellings that look alike",
    "empty-cell": "a needed value that is missing",
    "empty-file": "a file of 0 bytes",
    "empty-sheet": "a sheet without header or rows",
    "geojson": "outlines that are no GeoJSON areas",
    "irregular-grid": "positions that are no regular square grid, or stand twice",
    "missing-codec": "a compression that needs an extra",
    "missing-column": "a needed column that is missing",
    "missing-file": "a file that is not there",
    "missing-planes": "a stack with fewer planes than it claims",
    "missing-tiles": "an image with parts that are not in the file",
    "near-miss-column": 'a mistyped column name (with "did you mean")',
    "negative-position": "positions left of or above the first pixel",
    "no-cell-found": "`auto:` finds no cell",
    "no-image": "a TIFF without an image",
    "no-outline": "a label image without a cell, or no outline where one is needed",
    "not-a-file": "a folder, a pipe or a device",
    "not-a-path": "an address, a loop of links, a name that is too long",
    "not-a-tiff": "another kind of file",
    "not-an-area": "lines, points and text regions as outlines",
    "not-csv": "workbooks, images and other binary files as a sheet",
    "not-finite": "pixels that are no finite numbers",
    "ome-metadata": "OME metadata that is cut or contradicts the file",
    "out-of-range": "a value that cannot be meant (`5 mPa`, Poisson ratio 45)",
    "outline-format": "a file that is no kind of outline",
    "outline-labels": "label images that are not whole numbers, negative, or black and white masks of several cells",
    "outline-numbers": "one number for two outlines",
    "outline-outside": "outlines outside the image",
    "outline-overlap": "outlines on top of each other",
    "outline-shape": "an outline image of another size than the bead image",
    "path-outside": "a path or link that leads out of the sheet's folder",
    "pixel-type": "pixels of a type that no camera writes",
    "ragged-row": "rows with more or fewer cells than the header",
    "roi": "broken ImageJ regions",
    "sd-alone": "a standard deviation without its value",
    "several-files": "parts of a data set in several files",
    "several-frames": "regions of several frames in one archive",
    "several-images": "images of different sizes in one file",
    "small-grid": "a grid of fewer than 8 positions",
    "too-few-vectors": "hardly any value in a field",
    "too-large": "claimed sizes beyond any file, archives that swell",
    "truncated-file": "a file that was cut",
    "two-moduli": "Young's modulus and shear modulus together",
    "two-units": "one unit in the header and another in the cell",
    "unnamed-axis": "a stack that does not say what its planes are",
    "unnamed-column": "values under a column without a name",
    "which-source": "a row with none or several of images, displacement and traction",
    "wrong-encoding": "text that is not UTF-8",
    "wrong-unit": "a unit of another dimension, or none that exists",
    "zero-size": "an image without rows or columns",
}


def _load(path: Path) -> ModuleType:
    name = f"cases_of_{path.stem}"
    spec = importlib.util.spec_from_file_location(name, path)
    if spec is None or spec.loader is None:
        raise ImportError(path)
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    spec.loader.exec_module(module)
    return module


def cases() -> dict[str, Counter[str]]:
    """Code -> number of cases by kind of input."""
    sheet, run, field = (_load(HERE / f"test_{name}.py") for name in ("sheet", "run", "measured"))
    corpus = _load(HERE.parent / "images" / "corpus.py")
    found: dict[str, Counter[str]] = {}
    for kind, codes in (
        ("sheets", [case[0] for case in sheet.BAD_SHEETS]),
        ("paths", [case[1] for case in run.BAD_PATHS]),
        ("bead images", [bad.code for bad in corpus.IMAGES]),
        ("outlines", [bad.code for bad in corpus.OUTLINES]),
        ("measured fields", [case[0] for case in field.BAD_FIELDS]),
    ):
        for code in codes:
            found.setdefault(code, Counter())[kind] += 1
    return found


def block() -> str:
    """The table as Markdown."""
    found = cases()
    total = sum(sum(counter.values()) for counter in found.values())
    lines = [
        BEGIN,
        f"{total} cases, each kept as a test; none leaves a traceback or a number.",
        "",
        "| code | what it answers to | cases |",
        "|---|---|---|",
    ]
    for code in sorted(found):
        counts = ", ".join(f"{n} {kind}" for kind, n in found[code].items())
        lines.append(f"| `{code}` | {MEANING[code]} | {counts} |")
    return "\n".join([*lines, END])


def main() -> None:
    text = PAGE.read_text(encoding="utf-8")
    before, _, rest = text.partition(BEGIN)
    after = rest.partition(END)[2]
    PAGE.write_text(before + block() + after, encoding="utf-8")


if __name__ == "__main__":
    sys.path.insert(0, str(HERE))
    main()
