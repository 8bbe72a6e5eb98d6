"""The documentation builds without a warning, its examples run and give what they say, its commands exist."""

from __future__ import annotations

import doctest
import importlib.util
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest
import typer

ROOT = Path(__file__).parents[2]
DOCS = ROOT / "docs"
PAGES = sorted(DOCS.glob("*.md"))
_BLOCK = re.compile(r"^```python\n(.*?)^```", re.M | re.S)
_CONSOLE = re.compile(r"^```console\n(.*?)^```", re.M | re.S)


@pytest.mark.parametrize("page", [p for p in PAGES if ">>>" in p.read_text(encoding="utf-8")], ids=lambda p: p.stem)
def test_examples_give_what_they_say(page: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    text = page.read_text(encoding="utf-8")
    blocks = "\n".join(block for block in _BLOCK.findall(text) if ">>>" in block)
    assert blocks
    monkeypatch.chdir(tmp_path)
    test = doctest.DocTestParser().get_doctest(blocks, {}, page.name, str(page), 0)
    runner = doctest.DocTestRunner(optionflags=doctest.NORMALIZE_WHITESPACE | doctest.ELLIPSIS)
    said: list[str] = []
    runner.run(test, out=said.append)
    assert runner.failures == 0, "".join(said)
    assert runner.tries > 0


def test_every_command_in_the_pages_exists_with_its_options() -> None:
    from tfm.cli import app

    commands = typer.main.get_command(app).commands  # type: ignore[attr-defined]
    seen = 0
    for page in [*PAGES, ROOT / "README.md"]:
        for block in _CONSOLE.findall(page.read_text(encoding="utf-8")):
            for line in block.splitlines():
                words = line.removeprefix("$ ").split()
                if not words or words[0] != "tfm":
                    continue
                assert words[1] in commands, f"{page.name}: {line}"
                known = {opt for p in commands[words[1]].params for opt in [*p.opts, *p.secondary_opts]}
                used = {w for w in words[2:] if w.startswith("-")}
                assert used <= known, f"{page.name}: {line}"
                seen += 1
    assert seen > 5


def test_columns_page_is_generated_from_the_tables() -> None:
    spec = importlib.util.spec_from_file_location("generate_columns", Path(__file__).with_name("generate_columns.py"))
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    text = (DOCS / "columns.md").read_text(encoding="utf-8")
    assert text == module.columns_page(), "run: python tests/docs/generate_columns.py"


def test_readme_has_two_code_blocks_and_says_what_it_must() -> None:
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    blocks = re.findall(r"^```(\w*)\n(.*?)^```", text, re.M | re.S)
    assert [language for language, _ in blocks] == ["bash", "bash"]
    assert "data_demo/sheet.csv" in blocks[0][1]
    assert "-m pytest" in blocks[1][1]
    for words in ("not medical advice", "trained staff", "invented", "GPL-3.0-or-later"):
        assert words in " ".join(text.split())
    for link in re.findall(r"\]\(([^)#:]+)\)", text):
        assert (ROOT / link).exists(), link


@pytest.mark.slow
def test_pages_build_without_a_warning(tmp_path: Path) -> None:
    if importlib.util.find_spec("sphinx") is None and os.environ.get("CI") != "true":
        pytest.skip("the extra 'docs' is not installed")
    command = [sys.executable, "-m", "sphinx", "-W", "--keep-going", "-q", "-b", "html", "-d", str(tmp_path / "trees")]
    done = subprocess.run([*command, str(DOCS), str(tmp_path / "html")], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr[-3000:]
    assert (tmp_path / "html" / "index.html").exists()
