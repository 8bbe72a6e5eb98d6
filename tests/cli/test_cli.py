"""The command: exit codes, one line per error, last lines that agree with the files, nothing heavy for --help."""

from __future__ import annotations

import csv
import functools
import io
import json
import os
import pty
import re
import subprocess
import sys
from contextlib import redirect_stderr, redirect_stdout
from pathlib import Path

import pytest

import tfm.batch.field as real
import tfm.batch.run
import tfm.cli
import tfm.cli_options

ROOT = Path(__file__).parents[2]
STANDIN = ROOT / "tests" / "batch"
sys.path.insert(0, str(STANDIN))

from standin import make_sheet, work  # noqa: E402

#: The command with the stand-in for the numeric rooms: what is tested here is the command.
DRIVER = """
import functools, sys
import standin, tfm.batch.run
tfm.batch.run.run_sheet = functools.partial(tfm.batch.run.run_sheet, work=standin.work)
from tfm.cli import main
if __name__ == "__main__":
    main()
"""


def _environment(**more: str) -> dict[str, str]:
    path = os.pathsep.join([str(STANDIN), str(ROOT), os.environ.get("PYTHONPATH", "")])
    return {**os.environ, "PYTHONPATH": path, "OMP_NUM_THREADS": "1", "COLUMNS": "200", **more}


def _tfm(*arguments: str | Path) -> subprocess.CompletedProcess[str]:
    """The command in this process: what it writes and the code it leaves with."""
    out, err = io.StringIO(), io.StringIO()
    with pytest.MonkeyPatch.context() as patch, redirect_stdout(out), redirect_stderr(err):
        patch.setattr(sys, "argv", ["tfm", *map(str, arguments)])
        patch.setitem(tfm.cli_options._state, "debug", False)
        patch.setenv("COLUMNS", "200")
        with pytest.raises(SystemExit) as left:
            tfm.cli.main()
    code = left.value.code
    return subprocess.CompletedProcess(arguments, code if isinstance(code, int) else 0, out.getvalue(), err.getvalue())


def _run(*arguments: str | Path) -> subprocess.CompletedProcess[str]:
    """The same with the stand-in for the numeric rooms."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(real, "measure_field", real.measure_field)
        patch.setattr(tfm.batch.run, "run_sheet", functools.partial(tfm.batch.run.run_sheet, work=work))
        return _tfm(*arguments)


def test_help_loads_nothing_heavy() -> None:
    done = subprocess.run(
        [sys.executable, "-X", "importtime", "-c", "from tfm.cli import main; main()", "--help"],
        env=_environment(),
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0
    loaded = {line.rsplit("|", 1)[1].strip() for line in done.stderr.splitlines() if "|" in line}
    assert "typer" in loaded
    assert not loaded & {"numpy", "scipy", "pydantic", "pint", "xarray", "matplotlib", "tifffile", "skimage", "h5py"}


@pytest.mark.parametrize(
    "command", ["run", "check", "pairs", "demo", "report", "conditions", "stiffness", "export", "map", "beats", "plan"]
)
def test_every_command_has_help_with_every_option_explained(command: str) -> None:
    done = _tfm(command, "--help")
    assert done.returncode == 0
    for line in done.stdout.splitlines():
        if re.match(r"^│ \*?\s*--\w", line):
            assert re.search(r"[a-z]{3,}", line.split("--", 1)[1].split("  ", 1)[1]), line


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["run"], "Missing argument"),
        (["run", "nowhere.csv", "-o", "out"], "there is no such file; check the path of the sheet [missing-file]"),
        (["run", "nowhere.csv"], "Missing option"),
        (["walk"], "No such command"),
        (["run", "s.csv", "-o", "out", "--method", "magic"], "--method 'magic' is not known; choose auto, image"),
        (["run", "s.csv", "-o", "out", "--shard", "3/2"], "--shard '3/2' is not i/N; write for instance 2/8"),
        (["run", "s.csv", "-o", "out", "--timeout", "30"], "--timeout: '30' has no unit"),
        (["run", "s.csv", "-o", "out", "--workers", "-1"], "--workers"),
        (["run", "s.csv", "-o", "out", "--root", "nowhere"], "is not a folder"),
        (["check", "nowhere.csv"], "there is no such file"),
        (["pairs", "x.csv", "--youngs-modulus", "5", "--poisson", "0.4", "-o", "-"], "'5' has no unit"),
        (["pairs", "x.csv", "--youngs-modulus", "5 kPa", "--poisson", "0.7", "-o", "-"], "0.7"),
        (["pairs", "x.csv", "--youngs-modulus", "5 kPa", "--poisson", "0.4", "-o", "-"], "there is no such file"),
        (["report", "nowhere"], "[no-results]"),
    ],
)
def test_what_cannot_be_used_is_said_in_one_line_and_exit_2(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, arguments: list[str], said: str
) -> None:
    monkeypatch.chdir(tmp_path)
    done = _tfm(*arguments)
    assert done.returncode == 2
    assert said in done.stderr + done.stdout
    assert "Traceback" not in done.stderr + done.stdout
    assert not (tmp_path / "out").exists()


def test_check_lists_every_problem_at_once(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, ["a", "b", "c"])
    done = _tfm("check", sheet)
    assert (done.returncode, done.stdout) == (0, "")
    assert "3 rows, no problems (exit 0)" in done.stderr
    (tmp_path / "img" / "0_r.tif").write_bytes(b"II*\0 this is cut")
    (tmp_path / "img" / "2_s.tif").unlink()
    done = _tfm("check", sheet)
    assert done.returncode == 1
    lines = done.stdout.splitlines()
    assert [re.search(r"row (\d), column (\w+)", line).groups() for line in lines] == [  # type: ignore[union-attr]
        ("2", "relaxed"),
        ("4", "stressed"),
    ]
    assert "2 problems in 2 of 3 rows; 1 can be computed (exit 1)" in done.stderr
    sheet.write_text(sheet.read_text().replace("5 kPa", "5").replace("0.45", "45"))
    done = _tfm("check", sheet)
    assert done.returncode == 2
    assert len(done.stdout.splitlines()) == 6
    assert all(f"{sheet}, row" in line for line in done.stdout.splitlines())


def test_a_run_ends_with_failures_grouped_report_named_and_next_command(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, ["a", "bad-1", "bad-2", "bug-1", "e"])
    (tmp_path / "img" / "4_r.tif").unlink()
    done = _run("run", sheet, "-o", tmp_path / "out", "--workers", "1", "--no-report")
    assert done.returncode == 1
    assert done.stdout == ""
    lines = done.stderr.splitlines()
    last = lines[-15:]
    assert lines[-1].startswith("1 of 5 fields measured, 4 failed")
    assert lines[-1].endswith("(exit 1)")
    assert any("2 x [no-beads] bad-1, bad-2: no bead is in focus" in line for line in last)
    assert any("1 x [fault] bug-1" in line for line in last)
    assert any(line.startswith("next:    correct what is named above and repeat: tfm run") for line in last)
    assert f"{sheet}, row 6, column relaxed: there is no file 'img/4_r.tif'" in done.stderr
    assert "\x1b" not in done.stderr
    run = json.loads((tmp_path / "out" / "run.json").read_text())
    assert run["exit_code"] == 1
    assert "ZeroDivisionError" in (tmp_path / "out" / "logs" / "bug-1.log").read_text()
    again = _run("run", sheet, "-o", tmp_path / "out", "--workers", "1", "--no-report", "--explain")
    assert "a: kept: inputs, settings and version are unchanged" in again.stderr
    assert "bug-1: a fault of ours (ZeroDivisionError" in again.stderr


def test_a_run_in_which_nothing_can_be_computed_is_exit_2(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, ["a"])
    (tmp_path / "img" / "0_s.tif").unlink()
    done = _run("run", sheet, "-o", tmp_path / "out")
    assert done.returncode == 2
    assert "row 2, column stressed: there is no file 'img/0_s.tif'" in done.stderr
    assert done.stderr.splitlines()[-1] == "tfm: nothing was computed (exit 2)"
    assert not (tmp_path / "out").exists()


def test_a_fault_of_ours_is_101_with_one_line_and_a_traceback_on_request(tmp_path: Path) -> None:
    code = "import tfm.batch.run as r\ndef f(*a, **k): raise ZeroDivisionError('no')\nr.check_sheet = f\n"
    code += "from tfm.cli import main; main()"
    for debug in (False, True):
        arguments = ["check", "x.csv", *(["--debug"] if debug else [])]
        done = subprocess.run(
            [sys.executable, "-c", code, *arguments], env=_environment(), capture_output=True, text=True, check=False
        )
        assert done.returncode == 101
        assert ("Traceback" in done.stderr) is debug
        assert done.stderr.splitlines()[-1].startswith("tfm: a fault of ours: ZeroDivisionError: no")


def _on_terminal(folder: Path, *arguments: str | Path, **more: str) -> bytes:
    driver = folder / "driver.py"
    driver.write_text(DRIVER)
    parent, child = pty.openpty()
    process = subprocess.Popen(
        [sys.executable, str(driver), *map(str, arguments)],
        env=_environment(TERM="xterm-256color", **more),
        stderr=child,
        stdout=subprocess.DEVNULL,
    )
    os.close(child)
    data = b""
    while True:
        try:
            piece = os.read(parent, 65536)
        except OSError:
            break
        if not piece:
            break
        data += piece
    process.wait(timeout=60)
    os.close(parent)
    return data


def test_a_terminal_gets_a_bar_and_no_colour_means_no_colour(tmp_path: Path) -> None:
    sheet = make_sheet(tmp_path, ["a", "bad-1", "c"])
    plain = [re.compile(rb"\x1b\[[0-9;]*m")]
    shown = _on_terminal(tmp_path, "run", sheet, "-o", tmp_path / "one", "--workers", "1", "--no-report")
    assert b"3/3" in shown
    assert b"1 failed" in shown
    bare = _on_terminal(tmp_path, "run", sheet, "-o", tmp_path / "two", "--workers", "1", "--no-report", NO_COLOR="1")
    colours = {match for match in plain[0].findall(bare) if re.search(rb"3[0-9]|4[0-9]|38;|48;", match)}
    assert not colours


CELLS = "field,cell,x_um,y_um,dipole_xx_pNm,dipole_xy_pNm,dipole_yy_pNm\n"


def test_pairs_from_a_table(tmp_path: Path) -> None:
    """Two equal dipoles in line on a half-space: W = -2 P^2 (1 + nu) / (pi E r^3) (Boussinesq-Cerruti)."""
    table = tmp_path / "cells.csv"
    table.write_text(CELLS + "a,1,0,0,-1,0,0\na,2,20,0,-1,0,0\nb,1,0,0,-1,0,0\n")
    done = _tfm("pairs", table, "--youngs-modulus", "1 kPa", "--poisson", "0.5", "-o", "-")
    assert done.returncode == 0
    (row,) = csv.DictReader(done.stdout.splitlines())
    assert (row["field"], row["cell_a"], row["cell_b"]) == ("a", "1", "2")
    assert float(row["distance_um"]) == 20.0
    assert float(row["dipole_energy_fJ"]) == pytest.approx(-119.366207, rel=1e-7)
    assert row["energy_fJ"] == ""
    assert float(row["force_on_b_x_pN"]) < 0  # drawn towards a
    file = tmp_path / "pairs.csv"
    assert _tfm("pairs", table, "--youngs-modulus", "1 kPa", "--poisson", "0.5", "-o", file).returncode == 0
    assert file.read_text() == done.stdout
    thin = ["--thickness", "3 um", "--noise-energy", "1 fJ"]
    done = _tfm("pairs", table, "--youngs-modulus", "1 kPa", "--poisson", "0.5", *thin, "-o", "-")
    (layer,) = csv.DictReader(done.stdout.splitlines())
    assert abs(float(layer["dipole_energy_fJ"])) < 0.5 * 119.4  # a thin layer cuts the coupling off
    assert float(layer["coupling_number"]) == pytest.approx(abs(float(layer["dipole_energy_fJ"])), rel=1e-6)


@pytest.mark.parametrize(
    ("text", "code"),
    [
        ("field,cell\na,1\n", "missing-column"),
        (CELLS + "a,1,0,0,x,0,0\n", "bad-number"),
        (CELLS + "a,1,0,0,nan,0,0\n", "bad-number"),
        (CELLS + "a,1,0,0,,0,0\n", "empty-cell"),
        (CELLS + "a,,0,0,1,0,0\n", "empty-cell"),
        (CELLS + "a,1,0,0,1,0,0\na,1,9,0,1,0,0\n", "duplicate-cell"),
        ("\x00\x01", "missing-column"),
    ],
)
def test_bad_tables_of_cells(tmp_path: Path, text: str, code: str) -> None:
    table = tmp_path / "cells.csv"
    table.write_text(text)
    done = _tfm("pairs", table, "--youngs-modulus", "1 kPa", "--poisson", "0.5", "-o", tmp_path / "out.csv")
    assert done.returncode == 2
    assert f"[{code}]" in done.stderr
    assert "Traceback" not in done.stderr
    assert not (tmp_path / "out.csv").exists()


def test_cells_at_the_same_place_are_a_failed_pair(tmp_path: Path) -> None:
    table = tmp_path / "cells.csv"
    table.write_text(CELLS + "a,1,0,0,-1,0,0\na,2,0,0,-1,0,0\n")
    done = _tfm("pairs", table, "--youngs-modulus", "1 kPa", "--poisson", "0.5", "-o", "-")
    assert done.returncode == 1
    (row,) = csv.DictReader(done.stdout.splitlines())
    assert row["status"] == "failed"
    assert row["dipole_energy_fJ"] == ""
