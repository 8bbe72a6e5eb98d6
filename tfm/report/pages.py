"""The pages: ``report.html`` and one page per field, from templates that escape everything a user typed."""

from __future__ import annotations

import hashlib
import re
from collections.abc import Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from functools import partial
from multiprocessing import get_context
from pathlib import Path
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from tfm.report.drawing import Pictures, draw_field
from tfm.report.fieldpage import field_context
from tfm.report.files import svg_text, write_bytes
from tfm.report.groups import Group, differences, groups_of, verdict_sentence
from tfm.report.lines import field_line, group_line
from tfm.report.overview import moments_figure
from tfm.report.results import FieldResult, Results, read_results
from tfm.report.style import MARKS, drawing
from tfm.report.triage import LIMITS, findings, first_look
from tfm.report.words import plain

__all__ = ["build_report"]

_COLUMNS = (
    ("field", "Field and notes", False),
    ("status", "Status", False),
    ("condition", "Condition", False),
    ("cells", "Cells", True),
    ("moment", "Contractile moment, pN m", True),
    ("error", "Error, %", True),
    ("axis", "Axis, °", True),
    ("energy", "Strain energy, fJ", True),
    ("misfit", "Misfit", True),
    ("noise", "Noise, nm", True),
    ("gel", "Gel", False),
)
_WIDE = ("condition", "cells", "axis", "energy", "misfit", "noise", "gel")
_NUMERIC = (
    ("moment", "Contractile moment, pN m"),
    ("error", "Error of the moment, %"),
    ("energy", "Strain energy, fJ"),
    ("misfit", "Misfit"),
    ("noise", "Displacement noise, nm"),
    ("cells", "Cells"),
)


def _environment() -> Environment:
    found = Environment(
        loader=PackageLoader("tfm.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    found.globals.update(marks=MARKS, plain=plain)
    return found


def build_report(results_dir: Path, *, redo: bool = False, workers: int = 1) -> Path:
    """Write ``report.html`` and ``figures/`` of a results folder, from nothing but that folder.

    Parameters
    ----------
    results_dir
        A folder that ``tfm run`` wrote, finished or not.
    redo
        Draw all pictures anew; by default a picture whose data did not change is kept.
    workers
        Processes that draw; the report is the same for any number.

    Returns
    -------
    Path
        The report.

    Raises
    ------
    InputError
        When the folder holds no tables.
    """
    results = read_results(Path(results_dir))
    root, environment = results.root, _environment()
    drawn = _draw_all(results, redo=redo, workers=workers)
    css = _template(environment, "style.css")
    write_bytes(root / "figures" / "page.css", css.encode())
    page = environment.get_template("field.html")
    for i, field in enumerate(results.fields):
        around = {
            "before": results.fields[i - 1] if i else None,
            "after": results.fields[i + 1] if i + 1 < len(results.fields) else None,
        }
        text = page.render(
            field_context(field, drawn[field.name], results.columns),
            issues=findings(field, drawn[field.name].measures),
            **around,
        )
        write_bytes(root / "figures" / field.folder / "index.html", text.encode())
    return write_bytes(root / "report.html", _index(results, drawn, environment, css).encode())


def _draw_all(results: Results, *, redo: bool, workers: int) -> dict[str, Pictures]:
    """Pictures of every field, in this process or in several."""
    job = partial(draw_field, results.root, redo=redo)
    if workers <= 1 or len(results.fields) < 2 * workers:
        return {f.name: job(f) for f in results.fields}
    with ProcessPoolExecutor(workers, mp_context=get_context("forkserver")) as pool:
        return dict(zip((f.name for f in results.fields), pool.map(job, results.fields, chunksize=4), strict=True))


def _template(environment: Environment, name: str) -> str:
    """A style sheet or script as it stands: these are ours and hold nothing that a user typed."""
    if environment.loader is None:
        return ""
    return environment.loader.get_source(environment, name)[0]


def _index(results: Results, drawn: Mapping[str, Pictures], environment: Environment, css: str) -> str:
    excluded = {name for name, (decision, _) in results.decisions.items() if decision == "exclude"}
    kept = [f for f in results.fields if f.name not in excluded]
    groups = groups_of(kept)
    found = differences(groups)
    look = first_look(results.fields, {n: p.measures for n, p in drawn.items()})
    sheet = [dict(f.sheet) for f in results.fields if f.sheet]
    return environment.get_template("report.html").render(
        title=results.root.resolve().name,
        css=Markup(css),
        script=Markup(_template(environment, "report.js")),
        counts=results.counts(),
        total=len(results.fields),
        cell_count=sum(len(f.cell_names) for f in results.fields),
        method=_setting(results.run, "method"),
        version=_version(results.run),
        state_sentence=_state_sentence(results, drawn, len(excluded), len(look)),
        look=look,
        verdict=verdict_sentence(groups, found),
        comparisons=found,
        moments_alt=_moments_alt(groups),
        groups=[group_line(g, results.fields) for g in groups],
        conditions=list(dict.fromkeys(f.condition for f in results.fields if f.condition)),
        numeric=_NUMERIC,
        columns=_COLUMNS,
        wide=_WIDE,
        rows=[field_line(f, drawn[f.name]) for f in results.fields],
        any_change=any(f.change_only for f in results.fields),
        limits=LIMITS,
        meanings=results.columns,
        provenance=_provenance(results.run),
        run_key=_run_key(results),
        sheet=sheet,
        sheet_header=list(dict.fromkeys(k for r in sheet for k in r)),
        decisions={name: {"decision": d, "note": n} for name, (d, n) in results.decisions.items()},
        **_moments(results.root, groups),
    )


def _moments(root: Path, groups: Sequence[Group]) -> dict[str, Any]:
    """The figure of the first screen, as a file for papers and inline with a link behind every mark."""
    with drawing():
        plain_figure, linked = moments_figure(groups), moments_figure(groups, links=True)
        if plain_figure is None or linked is None:
            return {"moments_svg": "", "moments_file": ""}
        write_bytes(
            root / "figures" / "moments.svg", svg_text(plain_figure, title="Contractile moment by condition").encode()
        )
        inline = svg_text(linked, title="Contractile moment by condition")
    inline = inline[inline.index("<svg") :]
    # Inside a page the figure's own style rules would reach everything else, and each mark would be a tab stop.
    inline = re.sub(r"<style[^>]*>.*?</style>", "", inline, count=1, flags=re.S).replace("<a ", '<a tabindex="-1" ')
    return {"moments_svg": Markup(inline), "moments_file": "figures/moments.svg"}


def _moments_alt(groups: Sequence[Group]) -> str:
    parts = []
    for g in groups:
        interval = f", 95 % interval {plain(g.low)} to {plain(g.high)}" if g.low is not None else ""
        parts.append(f"{g.condition}: {len(g.cells)} cells, mean {plain(g.mean)} pN m{interval}.")
    return "Contractile moment of every cell by condition. " + " ".join(parts)


def _state_sentence(results: Results, drawn: Mapping[str, Pictures], excluded: int, listed: int) -> str:
    """How much there is, and how much was proven whole; 'all good' only for N of N with nothing to look at."""
    total, counts = len(results.fields), results.counts()
    usable = [f for f in results.fields if f.status in ("ok", "caution")]
    whole = sum(_verified(f, drawn[f.name]) for f in usable)
    text = (
        f"{len(usable)} of {total} fields gave numbers; the outputs of {whole} of these were verified by their hashes."
    )
    if total and counts["ok"] == total == whole:
        text = f"{total} of {total} fields are ok, and their outputs were verified by their hashes."
        text = (
            f"All good: {text}"
            if not listed
            else f"{text} {listed} of them {'is' if listed == 1 else 'are'} past a limit."
        )
    if excluded:
        text += f" {excluded} marked 'exclude' {'is' if excluded == 1 else 'are'} left out of the comparison."
    return text


def _verified(field: FieldResult, pictures: Pictures) -> bool:
    """The arrays are the very bytes that the record speaks of."""
    outputs = field.record.get("outputs")
    if not isinstance(outputs, Mapping) or not outputs or field.data is None:
        return False
    return dict(outputs) == {field.data.name: pictures.sha256}


def _setting(run: Mapping[str, Any], name: str) -> str:
    settings = run.get("settings")
    return str(settings.get(name, "")) if isinstance(settings, Mapping) else ""


def _version(run: Mapping[str, Any]) -> str:
    versions = run.get("versions")
    found = versions.get("tugtensor") if isinstance(versions, Mapping) else None
    return str(found or run.get("tfm", ""))


def _provenance(run: Mapping[str, Any]) -> list[tuple[str, str]]:
    found = [(key, str(run[key])) for key in ("outcome", "seconds", "workers") if run.get(key) is not None]
    for part in ("settings", "versions"):
        if isinstance(run.get(part), Mapping):
            found += [(f"{part}: {k}", str(v)) for k, v in run[part].items() if not isinstance(v, Mapping | list)]
    return found


def _run_key(results: Results) -> str:
    """Tells this study's decisions from another's in the browser's storage, wherever the folder lies."""
    return hashlib.sha256("\n".join(f.name for f in results.fields).encode()).hexdigest()[:16]
