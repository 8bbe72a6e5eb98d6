"""Makes the two pictures of the README from a finished demo run: ``python tests/docs/make_figures.py RESULTS``."""

from __future__ import annotations

import io
import shutil
import sys
from pathlib import Path

from PIL import Image

from tfm.report.fielddata import read_arrays
from tfm.report.figures import maps_figure
from tfm.report.results import read_results
from tfm.report.style import drawing

FIGURES = Path(__file__).parents[2] / "docs" / "figures"


def save_small(content: bytes, name: str, *, colours: int | None = None) -> None:
    """As PNG without transparency; a page of text as a palette PNG, a colour map never."""
    picture = Image.open(io.BytesIO(content)).convert("RGB")
    if colours is not None:
        picture = picture.quantize(colours, dither=Image.Dither.NONE)
    picture.save(FIGURES / name, optimize=True)


def main(results_dir: Path) -> None:
    """Field picture by matplotlib, first screen by Chromium."""
    from playwright.sync_api import sync_playwright

    results = read_results(results_dir)
    field = next(f for f in results.fields if f.name == "neighbours_thin_gel")
    if field.data is None:
        raise SystemExit("this field has no arrays")
    with drawing():
        figure = maps_figure(field, read_arrays(field.data))
        if figure is None:
            raise SystemExit("nothing to draw")
        stream = io.BytesIO()
        figure.savefig(stream, format="png", dpi=110, metadata={"Software": None})
    save_small(stream.getvalue(), "field.png")
    with sync_playwright() as driver:
        browser = driver.chromium.launch(
            executable_path=shutil.which("chromium"), args=["--no-sandbox", "--disable-gpu"]
        )
        page = browser.new_page(viewport={"width": 1366, "height": 768})
        page.goto((results_dir / "report.html").resolve().as_uri())
        save_small(page.screenshot(), "first-screen.png", colours=128)
        browser.close()


if __name__ == "__main__":
    main(Path(sys.argv[1]))
