"""The command ``tfm``.

Every command is a thin function: it reads its options, imports the room that does the work (heavy imports stay inside,
Every command is a thin function: it reads its options, imports the room that does the work (heavy imports stay inside;

    @app.command()
    def weigh(folder: Annotated[Path, typer.Argument(help="Results folder.")], debug: Debug = False) -> int:
        \"\"\"One sentence that --help shows.\"\"\"
        from tfm.somewhere import write_weights  # heavy imports here

        say(write_weights(folder))
        return 0

Results go to files or stdout, messages to stderr. Exit codes: 0 all usable; 1 some fields failed, the rest is written;
2 input or options that cannot be used, nothing computed; 101 a fault of ours; 130 interrupted. An error is one line.
"""

from __future__ import annotations

import os
import sys
import traceback
from pathlib import Path
from typing import Annotated, Any

import typer

from tfm.cli_options import Debug, choice, debugging, one_thread_each, option_quantity, say
from tfm.cli_population import register
from tfm.errors import InputError, TfmError

__all__ = ["app", "main"]

app = typer.Typer(
    name="tfm",
    help="Force-dipole tensors of cells, with error bars, from bead images of soft gels.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode="rich" if os.environ.get("TERM") != "dumb" else None,
)

#: Base of what the option parser raises; its home moved between versions of the library, this class did not.
_UsageError: type[Any] = typer.BadParameter.__mro__[2]


def _show_version(value: bool) -> None:
    if value:
        from tfm import __version__

        sys.stdout.write(f"tfm {__version__}\n")
        raise typer.Exit


@app.callback()
def _options(
    debug: Debug = False,
    version: Annotated[
        bool, typer.Option("--version", help="Print the version.", callback=_show_version, is_eager=True)
    ] = False,
) -> None:
    """Force-dipole tensors of cells, with error bars, from bead images of soft gels."""


def _shard(text: str | None) -> tuple[int, int] | None:
    if text is None:
        return None
    left, _, right = text.partition("/")
    if not (left.isdecimal() and right.isdecimal() and 1 <= int(left) <= int(right)):
        raise InputError(f"--shard '{text}' is not i/N", code="bad-option", remedy="write for instance 2/8")
    return int(left), int(right)


def _seconds(text: str) -> float | None:
    if text.lower() == "none":
        return None
    value = option_quantity(text, "time", "--timeout")
    if value <= 0:
        raise InputError(f"--timeout '{text}' is not above 0", code="bad-option", remedy="write for instance '30 min'")
    return value


def _cores() -> int:
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


@app.command()
def run(
    sheet: Annotated[Path, typer.Argument(help="The cell sheet: CSV, one row per imaged field.")],
    output: Annotated[Path, typer.Option("--output", "-o", help="Folder for the results.")],
    method: Annotated[
        str, typer.Option(help="image, bounded or fourier; auto = image where there are bead images, else bounded.")
    ] = "auto",
    workers: Annotated[
        int | None, typer.Option(min=1, help="Processes; fields are shared among them. Default: all cores.")
    ] = None,
    scheduler: Annotated[
        str | None, typer.Option(help="Address of a Dask scheduler to compute on (extra 'cluster').")
    ] = None,
    shard: Annotated[str | None, typer.Option(help="i/N: only every N-th row from the i-th; for job arrays.")] = None,
    redo: Annotated[bool, typer.Option("--redo", help="Compute fields again that are finished and unchanged.")] = False,
    explain: Annotated[
        bool, typer.Option("--explain", help="Say for every field what changed since it was computed.")
    ] = False,
    root: Annotated[
        Path | None, typer.Option(help="Folder that all files must lie in. Default: the sheet's own folder.")
    ] = None,
    timeout: Annotated[
        str, typer.Option(help="Give a field up when nothing moves for this long; 'none' = never.")
    ] = "30 min",
    lambda_choice: Annotated[
        str, typer.Option("--lambda", help="With --method fourier: gcv, l-curve, discrepancy or evidence.")
    ] = "gcv",
    gel_check: Annotated[
        bool, typer.Option("--gel-check/--no-gel-check", help="Test the entered Poisson ratio and thickness.")
    ] = True,
    report: Annotated[bool, typer.Option("--report/--no-report", help="Build report.html at the end.")] = True,
    debug: Debug = False,
) -> int:
    """Measure every field of a cell sheet: dipoles, error bars, pair energies, tables and a report."""
    say(f"reading {sheet}")
    one_thread_each()
    from tfm.batch.progress import Progress, summary_lines
    from tfm.batch.run import RunOptions, run_sheet
    from tfm.batch.settings import METHODS, RunSettings

    settings = RunSettings.model_validate(
        {
            "method": choice(method, METHODS, "--method"),
            "lambda_choice": choice(lambda_choice, ("gcv", "l-curve", "discrepancy", "evidence"), "--lambda"),
            "gel_check": gel_check,
        }
    )
    if root is not None and not root.is_dir():
        raise InputError(f"--root '{root}' is not a folder", code="bad-option", remedy="name a folder above the images")
    options = RunOptions(workers or _cores(), scheduler, _shard(shard), redo, root, _seconds(timeout))
    progress = Progress(explain=explain)

    def start(total: int, _: Any, problems: Any) -> None:
        for problem in problems:
            say(str(problem))
        progress.start(total)

    try:
        summary = run_sheet(sheet, output, settings=settings, options=options, on_start=start, on_field=progress.field)
    finally:
        progress.stop()
    finished = not summary.stopped and all(e.finished for e in summary.entries)
    if finished and any(len(e.rows["fields"]) > 1 for e in summary.entries):
        from tfm.population.beat_table import write_beats

        write_beats(output, output / "beats.csv")
    page, fault = None, None
    if report and finished:
        page, fault = _report(output)
    command = "tfm " + " ".join(_quoted(a) for a in sys.argv[1:] if a != "--redo")
    for line in summary_lines(summary, output, report=page, command=command):
        say(line)
    if fault is not None:
        raise fault
    return summary.exit_code


def _report(output: Path) -> tuple[Path | None, Exception | None]:
    """The report of finished results; what goes wrong with it must not hide that the tables are complete."""
    try:
        from tfm.report import build_report

        return build_report(output), None
    except Exception as error:  # raised again after the summary
        say(f"the tables in {output} are complete, but the report failed; 'tfm report' builds it again")
        return None, error


def _quoted(text: str) -> str:
    import shlex

    return shlex.quote(text)


@app.command()
def check(
    sheet: Annotated[Path, typer.Argument(help="The cell sheet.")],
    root: Annotated[
        Path | None, typer.Option(help="Folder that all files must lie in. Default: the sheet's own folder.")
    ] = None,
    debug: Debug = False,
) -> int:
    """Read a cell sheet and the headers of its files, and list every problem at once."""
    from tfm.batch.problems import SheetError
    from tfm.batch.run import check_sheet

    try:
        found, problems = check_sheet(sheet, root=root)
    except SheetError as error:
        if debugging():
            traceback.print_exc()
        for problem in error.problems:
            sys.stdout.write(f"{problem}\n")
        say(f"{sheet}: {len(error.problems)} problems; nothing can be computed (exit 2)")
        return 2
    for problem in problems:
        sys.stdout.write(f"{problem}\n")
    bad = len({problem.row for problem in problems})
    good = len(found.rows) - bad
    if not problems:
        say(f"{sheet}: {good} rows, no problems (exit 0)")
        return 0
    code = 1 if good else 2
    say(f"{sheet}: {len(problems)} problems in {bad} of {len(found.rows)} rows; {good} can be computed (exit {code})")
    return code


@app.command()
def pairs(
    cells: Annotated[
        Path, typer.Argument(help="Table with field, cell, x_um, y_um and the dipoles; cells.csv will do.")
    ],
    youngs_modulus: Annotated[str, typer.Option(help="Young's modulus with its unit, for instance '5 kPa'.")],
    poisson: Annotated[str, typer.Option(help="Poisson ratio, 0 to 0.5.")],
    output: Annotated[str, typer.Option("--output", "-o", help="File for the pair table; - = stdout.")],
    thickness: Annotated[str | None, typer.Option(help="Thickness of the gel, for instance '30 um'.")] = None,
    noise_energy: Annotated[str | None, typer.Option(help="Energy of random motion, for the coupling number.")] = None,
    debug: Debug = False,
) -> int:
    """Interaction energy, force and torque of every pair of cells, from the dipole tensors alone."""
    from tfm.batch.pair_table import write_pair_table
    from tfm.gel import Gel

    gel = Gel(
        option_quantity(youngs_modulus, "stress", "--youngs-modulus"),
        option_quantity(poisson, "dimensionless", "--poisson"),
        None if thickness is None else option_quantity(thickness, "length", "--thickness"),
    )
    noise = None if noise_energy is None else option_quantity(noise_energy, "energy", "--noise-energy")
    count, failed = write_pair_table(cells, gel, output, noise_energy=noise)
    say(f"{count} pairs" + (f", {failed} failed" if failed else "") + f" (exit {1 if failed else 0})")
    return 1 if failed else 0


@app.command()
def demo(
    folder: Annotated[Path, typer.Argument(help="Folder for the demo study (invented data).")],
    debug: Debug = False,
) -> int:
    """Write an invented study to try things out: images, outlines, a cell sheet, and the forces that were put in."""
    say(f"writing the demo study to {folder}")
    one_thread_each()
    from tfm.batch.atomic import storage_guard
    from tfm.synth.demo import write_demo

    with storage_guard(folder):
        sheet = write_demo(folder)
    say(f"next: tfm run {_quoted(str(sheet))} -o {_quoted(str(folder / 'results'))}")
    return 0


@app.command(name="report")
def report_command(
    folder: Annotated[Path, typer.Argument(help="Results folder of a run.")],
    redo: Annotated[bool, typer.Option("--redo", help="Draw all pictures anew.")] = False,
    debug: Debug = False,
) -> int:
    """Build the report of a results folder again, from nothing but that folder."""
    say(f"reading {folder}")
    from tfm.report import build_report

    page = build_report(folder, redo=redo)
    say(f"report: {page} (exit 0)")
    return 0


register(app)


def main() -> None:
    """Entry point: run a command and leave with the exit code that it stands for."""
    try:
        code = app(standalone_mode=False)
    except _UsageError as error:
        say(f"tfm: {error.format_message()}; see tfm --help [bad-option]")
        code = 2
    except typer.Abort:
        say("tfm: interrupted (exit 130)")
        code = 130
    except KeyboardInterrupt:
        say("tfm: interrupted (exit 130)")
        code = 130
    except BrokenPipeError:
        # Whoever read our output (head, less) has seen enough.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        code = 0
    except TfmError as error:
        code = _refuse(error)
    except Exception as error:  # nothing else may leave without being called what it is
        if debugging():
            traceback.print_exc()
        where = traceback.extract_tb(error.__traceback__)[-1]
        say(
            f"tfm: a fault of ours: {type(error).__name__}: {' '.join(str(error).split())[:200]} "
            f"({Path(where.filename).name}:{where.lineno}); repeat with --debug and send us the traceback (exit 101)"
        )
        code = 101
    sys.exit(code if isinstance(code, int) else 0)


def _refuse(error: TfmError) -> int:
    if debugging():
        traceback.print_exc()
    for problem in getattr(error, "problems", (error,)):
        say(f"tfm: {problem}")
    if error.code in ("storage", "disk-full"):
        say("tfm: stopped; what was written before is whole (exit 1)")
        return 1
    say("tfm: nothing was computed (exit 2)")
    return 2
