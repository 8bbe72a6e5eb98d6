"""What to look at first: every field that is not plainly good, worst first, with measure, value, limit and reason."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType

from tfm.report.results import FieldResult, number

__all__ = ["LIMITS", "Finding", "Limit", "findings", "first_look", "relative_error"]


@dataclass(frozen=True)
class Limit:
    """A measure of a field that has a limit: above it the field deserves a look."""

    measure: str
    limit: float
    unit: str
    reason: str
    read: Callable[[FieldResult, Mapping[str, float]], float | None]


@dataclass(frozen=True)
class Finding:
    """One thing wrong with one field. ``weight`` sorts: larger is worse."""

    field: FieldResult
    measure: str
    value: str
    limit: str
    reason: str
    weight: float


def _largest(field: FieldResult, key: str) -> float | None:
    values = [number(r, key) for r in field.frames]
    return max((v for v in values if v is not None), default=None)


def _rejected(field: FieldResult) -> float | None:
    shares = []
    for row in field.frames:
        whole, lost = number(row, "vectors"), number(row, "vectors_rejected")
        if whole and lost is not None:
            shares.append(100 * lost / whole)
    return max(shares, default=None)


def relative_error(field: FieldResult) -> float | None:
    """Largest relative standard deviation of a contractile moment, in percent."""
    shares = []
    for row in field.cells:
        value = number(row, "contractile_moment_pNm")
        sd = number(row, "contractile_moment_total_sd_pNm") or number(row, "contractile_moment_sd_pNm")
        if value and sd is not None:
            shares.append(min(100 * sd / abs(value), 999.0))
    return max(shares, default=None)


def _drift(field: FieldResult) -> float | None:
    sizes = []
    for row in field.frames:
        x, y = number(row, "drift_x_px"), number(row, "drift_y_px")
        if x is not None and y is not None:
            sizes.append((x * x + y * y) ** 0.5)
    return max(sizes, default=None)


_NONE: Mapping[str, float] = MappingProxyType({})
_NONE_OF_ALL: Mapping[str, Mapping[str, float]] = MappingProxyType({})

#: The limits that this page applies; they decide what is listed first and change no status and no number.
LIMITS: tuple[Limit, ...] = (
    Limit(
        "unexplained ground",
        0.5,
        "%",
        "pull outside the outlines (a cell not outlined?), or another gel than entered",
        lambda _, m: m.get("unexplained ground"),
    ),
    Limit(
        "misfit",
        1.5,
        "",
        "the traction does not explain the displacement: outline, gel or focus is off",
        lambda f, _: _largest(f, "misfit"),
    ),
    Limit(
        "peak strain",
        0.2,
        "",
        "beyond small strain the gel is no longer linear",
        lambda f, _: number(f.gel, "strain_peak"),
    ),
    Limit(
        "vectors rejected",
        20.0,
        "%",
        "too many beads lost between the frames: focus or bleaching",
        lambda f, _: _rejected(f),
    ),
    Limit("error of the moment", 50.0, "%", "the 95 % interval includes zero", lambda f, _: relative_error(f)),
    Limit("drift", 40.0, "px", "a large shift between the frames: was the dish moved?", lambda f, _: _drift(f)),
)


def findings(field: FieldResult, measures: Mapping[str, float] = _NONE) -> list[Finding]:
    """Everything wrong with one field, worst first; empty for a field that is plainly good."""
    if field.status == "unfinished":
        return [
            Finding(
                field,
                "result",
                "none yet",
                "one",
                "the run ended before this field; run it again, finished fields are kept",
                1e8,
            )
        ]
    if field.status == "failed":
        return [Finding(field, "result", "none", "one", field.message or "no message was left", 1e9)]
    found = []
    for limit in LIMITS:
        value = limit.read(field, measures)
        if value is not None and value > limit.limit:
            unit = f" {limit.unit}" if limit.unit else ""
            reason = _said(field, limit.measure) or limit.reason
            found.append(
                Finding(
                    field, limit.measure, f"{value:.3g}{unit}", f"≤ {limit.limit:g}{unit}", reason, value / limit.limit
                )
            )
    found += _gel_findings(field)
    if not found and field.status == "caution":
        found.append(
            Finding(
                field,
                "note of the run",
                "1" if "; " not in field.message else str(field.message.count("; ") + 1),
                "none",
                field.message,
                0.5,
            )
        )
    return sorted(found, key=lambda f: -f.weight)


def _said(field: FieldResult, measure: str) -> str:
    """The run's own sentence about a measure, where it left one."""
    return next((part for part in field.message.split("; ") if measure in part.lower()), "")


def _gel_findings(field: FieldResult) -> list[Finding]:
    gel = field.gel
    if gel is None or gel.get("verdict") not in ("contradicted", "doubtful"):
        return []
    entered, low, high = (number(gel, k) for k in ("poisson", "poisson_low", "poisson_high"))
    weight = 3.0 if gel["verdict"] == "contradicted" else 0.8
    reason = gel.get("notes") or f"the gel as entered is {gel['verdict']} by the beads"
    if entered is not None and low is not None and high is not None and not low <= entered <= high:
        return [Finding(field, "Poisson ratio", f"{entered:g}", f"{low:.3g} to {high:.3g}", reason, weight)]
    return [Finding(field, "gel", gel["verdict"], "agrees", reason, weight)]


def first_look(
    fields: Sequence[FieldResult], measures: Mapping[str, Mapping[str, float]] = _NONE_OF_ALL
) -> list[Finding]:
    """The worst finding of every field that has one, worst field first, sheet order among equals."""
    found = [findings(f, measures.get(f.name, _NONE)) for f in fields]
    worst = [f[0] for f in found if f]
    return sorted(worst, key=lambda f: (-f.weight, f.field.position))
