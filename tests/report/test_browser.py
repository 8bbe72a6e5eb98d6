"""The report in a real browser: what a stranger sees, does and takes away. Screenshots go to .artefacts/."""

from __future__ import annotations

import csv
import io
import os
import shutil
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

from tfm.batch.sheet import read_sheet
from tfm.report import build_report
from tfm.report.drawing import Pictures

pytestmark = pytest.mark.browser

ARGUMENTS = [
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]
ARTEFACTS = Path(__file__).parents[2] / ".artefacts"
#: Lowest contrast of any text against what is behind it (WCAG 2.1, 1.4.3, level AA).
CONTRAST = """() => {
  const line = (x) => x / 255 <= 0.03928 ? x / 3294.6 : ((x / 255 + 0.055) / 1.055) ** 2.4;
  const light = (c) => { const v = c.map(line);
    return 0.2126 * v[0] + 0.7152 * v[1] + 0.0722 * v[2]; };
  const parse = (t) => (t.match(/[\\d.]+/g) || []).map(Number);
  const behind = (e) => { for (; e; e = e.parentElement) { const b = parse(getComputedStyle(e).backgroundColor);
    if (b.length === 3 || b[3] > 0.99) return b.slice(0, 3); } return [255, 255, 255]; };
  let worst = [99, ""];
  for (const e of document.querySelectorAll("body *")) {
    if (e.closest("svg, script, style")) continue;
    if (![...e.childNodes].some((n) => n.nodeType === 3 && n.textContent.trim())) continue;
    if (!e.getClientRects().length) continue;
    const a = light(parse(getComputedStyle(e).color).slice(0, 3)), b = light(behind(e));
    const ratio = (Math.max(a, b) + 0.05) / (Math.min(a, b) + 0.05);
    if (ratio < worst[0]) worst = [ratio, e.textContent.trim().slice(0, 40)];
  }
  return worst;
}"""


@pytest.fixture(scope="module")
def chromium() -> Iterator[Any]:
    path = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")
    if path is None and os.environ.get("CI") != "true":
        pytest.skip("no Chromium on this machine")
    from playwright.sync_api import sync_playwright

    with sync_playwright() as driver:
        browser = driver.chromium.launch(executable_path=path, args=ARGUMENTS)
        yield browser
        browser.close()


@pytest.fixture
def open_page(chromium: Any) -> Iterator[Callable[..., Any]]:
    """Opens a file at a size; fails the test on any console error, script error or request that leaves the disk."""
    contexts, trouble = [], []

    def opened(path: Path, *, width: int = 1366, height: int = 768, hash: str = "", script: bool = True) -> Any:
        context = chromium.new_context(viewport={"width": width, "height": height}, java_script_enabled=script)
        contexts.append(context)
        page = context.new_page()
        page.on("console", lambda m: trouble.append(m.text) if m.type in ("error", "warning") else None)
        page.on("pageerror", lambda e: trouble.append(str(e)))
        page.on("request", lambda r: None if r.url.startswith(("file:", "data:", "blob:")) else trouble.append(r.url))
        page.goto(path.as_uri() + hash)
        return page

    yield opened
    for context in contexts:
        context.close()
    assert trouble == []


@pytest.fixture(scope="module")
def large(tmp_path_factory: pytest.TempPathFactory, make_folder: Callable[..., Path]) -> Path:
    """300 fields, 7 of them with something wrong; only the index is of interest, so nothing is drawn."""
    import tfm.report.pages as pages

    root = make_folder(tmp_path_factory.mktemp("large") / "results", fields=300, bad=7, arrays=False)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(pages, "draw_field", lambda *_, **__: Pictures(0, (), None, ""))
        build_report(root)
    return root


def _shown(page: Any) -> list[str]:
    return list(page.eval_on_selector_all("#fields tbody tr:not([hidden])", "rows => rows.map(r => r.dataset.field)"))


def _written(page: Any, button: str) -> str:
    with page.expect_download() as waiting:
        page.click(button)
    return Path(waiting.value.path()).read_text(encoding="utf-8")


def _download(page: Any, button: str) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(_written(page, button))))


def test_first_screen_answers_what_went_wrong(large: Path, open_page: Callable[..., Any]) -> None:
    page = open_page(large / "report.html")
    ARTEFACTS.mkdir(exist_ok=True)
    page.screenshot(path=ARTEFACTS / "first-screen-300.png")
    rows = page.query_selector_all("#look-table tbody tr")
    assert len(rows) == 7
    boxes = [row.bounding_box() for row in rows]
    assert all(box["y"] >= 0 and box["y"] + box["height"] <= 768 for box in boxes)
    assert all(len([c for c in row.query_selector_all("td") if c.inner_text().strip()]) == 6 for row in rows)
    tally = " ".join(page.inner_text(".tally").split())
    assert [word in tally for word in ("4■ failed", "3▲ caution", "293● ok")] == [True] * 3
    statuses = [row.query_selector(".mark").inner_text().split()[-1] for row in rows]
    assert statuses == sorted(statuses, key=["failed", "caution"].index)
    verdict = page.query_selector(".verdict").bounding_box()
    assert verdict["y"] + verdict["height"] <= 768
    assert "significant" in page.inner_text(".verdict")
    assert page.query_selector(".frame svg").bounding_box()["y"] < 768


def test_sorting_filtering_and_the_address(large: Path, open_page: Callable[..., Any]) -> None:
    page = open_page(large / "report.html")
    page.click("#fields th[data-key=moment] button")
    first = page.evaluate("[...document.querySelectorAll('#fields tbody tr')].map(r => r.dataset.moment)")
    measured = [float(v) for v in first if v]
    assert measured == sorted(measured)
    assert first[-1] == ""  # unmeasured last
    page.click("#fields th[data-key=moment] button")
    again = page.evaluate("[...document.querySelectorAll('#fields tbody tr')].map(r => r.dataset.moment)")
    assert [float(v) for v in again if v] == sorted(measured, reverse=True)
    assert again[-1] == ""
    assert "sort=moment&dir=descending" in page.url
    page.check("input[name=status][value=failed]")
    failed = _shown(page)
    assert 0 < len(failed) <= 7
    assert page.inner_text("#shown").startswith(f"{len(failed)} of 300")
    shared = open_page(large / "report.html", hash="#" + page.url.split("#")[1])
    assert _shown(shared) == failed
    assert shared.is_checked("input[name=status][value=failed]")


def test_search_and_numbers(large: Path, open_page: Callable[..., Any]) -> None:
    page = open_page(large / "report.html", hash="#moment.min=2.5")
    strong = _shown(page)
    assert strong
    assert strong == page.evaluate(
        "[...document.querySelectorAll('#fields tbody tr')].filter(r => Number(r.dataset.moment) >= 2.5)"
        ".map(r => r.dataset.field)"
    )
    page.click("#reset")
    assert len(_shown(page)) == 300
    page.fill("#q", "<script>")
    assert _shown(page) == ["<script>alert(1)</script>"]
    page.fill("#q", "misfit 18")
    assert all("plate-" in name for name in _shown(page))


def test_decisions_stay_and_leave_as_files(large: Path, open_page: Callable[..., Any], tmp_path: Path) -> None:
    page = open_page(large / "report.html")
    row = "#fields tr[data-field='plate-001'] .choice"
    page.select_option(f"{row} select", "exclude")
    page.fill(f"{row} input", 'dust, "twice"')
    page.keyboard.press("Tab")
    page.reload()
    assert page.input_value(f"{row} select") == "exclude"
    assert page.input_value(f"{row} input") == 'dust, "twice"'
    saved = _download(page, "#export-decisions")
    assert saved == [{"field": "plate-001", "decision": "exclude", "note": 'dust, "twice"'}]
    page.fill("#q", "soft")
    shown = _shown(page)
    sheet = _download(page, "#export-sheet")
    assert [r["field"] for r in sheet] == [name for name in shown if name != "plate-001"]
    assert "outlines.tif" in sheet[0]["outline"]
    # What was saved is a sheet that runs again, with units where they were.
    (tmp_path / "sheet.csv").write_text(_written(page, "#export-sheet"), encoding="utf-8")
    again = read_sheet(tmp_path / "sheet.csv")
    assert [row.field for row in again.rows] == [r["field"] for r in sheet]
    assert {row.youngs_modulus for row in again.rows} == {2000.0}
    # The file finds its way back into another browser.
    other = open_page(large / "report.html")
    (tmp_path / "decisions.csv").write_text('field,decision,note\nplate-003,keep,"a, b"\n', encoding="utf-8")
    other.set_input_files("#import", tmp_path / "decisions.csv")
    other.wait_for_function(
        "document.querySelector(\"#fields tr[data-field='plate-003']\").dataset.decision === 'keep'"
    )
    assert other.input_value("#fields tr[data-field='plate-003'] .choice input") == "a, b"


def test_field_pages_open_and_show_their_pictures(built: Path, open_page: Callable[..., Any]) -> None:
    page = open_page(built / "report.html")
    page.click("#fields a:text-is('<script>alert(1)</script>')")
    assert page.inner_text("h1") == "<script>alert(1)</script>"
    page.evaluate("document.querySelectorAll('img').forEach(i => { i.loading = 'eager'; })")
    page.wait_for_function("[...document.images].every(i => i.complete && i.naturalWidth > 0)")
    assert len(page.query_selector_all("figure img")) >= 3
    page.click("a[rel=next]")
    assert page.inner_text("h1") == "plate-003"
    page.click("text=All fields")
    assert page.inner_text("h1").startswith("Force dipoles of cells")


def test_keyboard_alone(built: Path, open_page: Callable[..., Any]) -> None:
    page = open_page(built / "report.html")
    page.keyboard.press("Tab")
    assert page.evaluate("document.activeElement.className") == "skip"
    for _ in range(60):
        page.keyboard.press("Tab")
        if page.evaluate("document.activeElement.closest('th')?.dataset.key") == "moment":
            break
    width = page.evaluate("getComputedStyle(document.activeElement).outlineWidth")
    assert float(width.removesuffix("px")) >= 2
    page.keyboard.press("Enter")
    assert page.get_attribute("#fields th[data-key=moment]", "aria-sort") == "ascending"


def test_readable_without_scripts(built: Path, open_page: Callable[..., Any]) -> None:
    page = open_page(built / "report.html", script=False)
    assert page.locator("#fields tbody tr").count() == 9
    assert page.locator("#fields tbody tr >> nth=0").is_visible()
    assert not page.locator("#controls").is_visible()
    assert not page.locator(".choice >> nth=0").is_visible()


@pytest.mark.parametrize("width", [1400, 700])
def test_contrast_width_and_looks(built: Path, open_page: Callable[..., Any], width: int) -> None:
    ARTEFACTS.mkdir(exist_ok=True)
    for name, file in (("index", "report.html"), ("field", "figures/plate-003/index.html")):
        page = open_page(built / file, width=width, height=900)
        page.evaluate("document.querySelectorAll('img').forEach(i => { i.loading = 'eager'; })")
        page.wait_for_function("[...document.images].every(i => i.complete)")
        page.screenshot(path=ARTEFACTS / f"{name}-{width}.png", full_page=True)
        ratio, text = page.evaluate(CONTRAST)
        assert ratio >= 4.5, text
        assert page.evaluate("document.documentElement.scrollWidth") <= width
        if name == "index":
            names = page.eval_on_selector_all("#fields .name", "all => all.map(e => e.getClientRects().length)")
            assert max(names) <= 3  # lines that a name is broken into


def test_prints_without_controls(built: Path, open_page: Callable[..., Any]) -> None:
    page = open_page(built / "report.html", width=794, height=1123)  # A4 at 96 dots per inch
    page.emulate_media(media="print")
    names = page.eval_on_selector_all("#fields .name", "all => all.map(e => e.getClientRects().length)")
    assert max(names) <= 3
    assert page.evaluate("document.documentElement.scrollWidth") <= 794
    assert not page.locator("#controls").is_visible()
    assert not page.locator(".choice >> nth=0").is_visible()
    assert page.locator("#fields tbody tr >> nth=8").is_visible()
