"""How long the report takes to write, to open and to filter, and how large it is. The second half needs Chromium.

Run: ``python tests/benchmarks/bench_report.py``. Targets: at most 0.5 s per field to write; an index of 500 opens
in at most 2 s; a filter of 1,000 fields answers in at most 0.2 s; index and thumbnails at most 15 MB at 300 fields and
40 MB at 1,000. Times depend on the machine: a plain matplotlib figure of three images is the yardstick of the same run.
"""

from __future__ import annotations

import importlib.util
import io
import shutil
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib.figure import Figure

import tfm.report.pages as pages
from tfm.report import build_report
from tfm.report.drawing import Pictures, draw_field

MEASURED = 12
ARGUMENTS = ["--headless", "--no-sandbox", "--disable-gpu", "--no-first-run", "--disable-background-networking"]


def _fixtures() -> Any:
    path = Path(__file__).parents[1] / "report" / "conftest.py"
    spec = importlib.util.spec_from_file_location("report_fixtures", path)
    if spec is None or spec.loader is None:
        raise SystemExit(f"{path} is missing")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def yardstick() -> float:
    """Seconds for a plain figure of three 512 x 512 images, saved as SVG."""
    image = np.random.default_rng(1).random((512, 512))
    since = time.perf_counter()
    figure = Figure(figsize=(12, 4))
    for ax in figure.subplots(1, 3):
        ax.imshow(image)
    figure.savefig(io.StringIO(), format="svg")
    return time.perf_counter() - since


def write(root: Path, make_folder: Any) -> None:
    """Seconds per field to draw and write, and per field when nothing changed."""
    make_folder(root, fields=MEASURED, bad=0)
    build_report(root)  # imports, fonts
    plain = min(yardstick() for _ in range(3))
    since = time.perf_counter()
    build_report(root, redo=True)
    drawn = (time.perf_counter() - since) / MEASURED
    since = time.perf_counter()
    build_report(root)
    kept = (time.perf_counter() - since) / MEASURED
    print(
        f"write: {drawn:.3f} s per field ({drawn / plain:.2f} plain figures of {plain:.3f} s); unchanged {kept:.3f} s"
    )


def large_index(root: Path, count: int, make_folder: Any) -> Path:
    """An index of ``count`` fields with a thumbnail each; their own pages are not what is timed."""
    make_folder(root, fields=count, bad=7, arrays=False)
    small = next(Path(root.parent / "small").glob("figures/*/thumb.webp"))

    def stub(folder: Path, field: Any, *, redo: bool = False) -> Pictures:
        place = folder / "figures" / field.folder
        place.mkdir(parents=True, exist_ok=True)
        shutil.copy(small, place / "thumb.webp")
        return Pictures(0, (), "thumb.webp", "")

    pages.draw_field = stub
    try:
        build_report(root)
    finally:
        pages.draw_field = draw_field
    size = (root / "report.html").stat().st_size + sum(p.stat().st_size for p in root.glob("figures/*/thumb.webp"))
    print(f"index of {count}: {size / 1e6:.1f} MB with its thumbnails")
    return root / "report.html"


def open_and_filter(files: dict[int, Path]) -> None:
    """Seconds until the index can be used, and for one filter."""
    from playwright.sync_api import sync_playwright

    with sync_playwright() as driver:
        browser = driver.chromium.launch(executable_path=shutil.which("chromium"), args=ARGUMENTS)
        for count, file in files.items():
            page = browser.new_page(viewport={"width": 1366, "height": 768})
            page.goto("about:blank")
            since = time.perf_counter()
            page.goto(file.as_uri(), wait_until="load")
            page.wait_for_selector("#shown")
            opened = time.perf_counter() - since
            took = page.evaluate(
                """() => { const q = document.getElementById("q"), times = [];
                for (const text of ["plate-1", "soft", ""]) { const t = performance.now(); q.value = text;
                  q.dispatchEvent(new Event("input", {bubbles: true})); document.body.offsetHeight;
                  times.push(performance.now() - t); }
                return Math.max(...times); }"""
            )
            print(f"index of {count}: usable after {opened:.2f} s, filter {took:.0f} ms")
            page.close()
        browser.close()


def main() -> None:
    """All of it."""
    make_folder = _fixtures().make_folder
    with tempfile.TemporaryDirectory() as folder:
        root = Path(folder)
        write(root / "small", make_folder)
        files = {count: large_index(root / str(count), count, make_folder) for count in (300, 500, 1000)}
        if shutil.which("chromium") is None:
            sys.exit("no Chromium: opening was not timed")
        open_and_filter(files)


if __name__ == "__main__":
    main()
