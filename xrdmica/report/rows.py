"""Results as rows of tables: what stands in the CSV files."""

from __future__ import annotations

from collections.abc import Iterable

from xrdmica.results import Findings, SampleResult

__all__ = [
    "EVIDENCE_HEADER", "FAILURES_HEADER", "GROUPS_HEADER", "PROPORTIONS_HEADER", "SUMMARY_HEADER", "Cell", "all_notes",
    "evidence_rows", "failures_rows", "groups_rows", "proportions_rows", "summary_rows",
]  # fmt: skip

Cell = str | int | float | None

PROPORTIONS_HEADER = (
    "sample", "phase", "name", "group", "status", "weight_percent", "low95", "high95", "detection_limit", "basis",
)  # fmt: skip
GROUPS_HEADER = ("sample", "group", "status", "weight_percent", "low95", "high95", "basis")
SUMMARY_HEADER = (
    "sample", "swelling", "expandable_percent", "low95", "high95", "present", "possible", "reduced_chi_square", "notes",
)  # fmt: skip
FAILURES_HEADER = ("sample", "reason")
EVIDENCE_HEADER = (
    "sample", "phase", "name", "group", "status", "reason", "kind", "text", "weight", "scan", "two_theta", "d_observed",
    "d_error", "order", "d_expected",
)  # fmt: skip


def proportions_rows(results: Iterable[SampleResult]) -> list[tuple[Cell, ...]]:
    """Rows of ``proportions.csv``: one per sample and phase considered."""
    return [
        (r.sample, p.phase, p.name, p.group, p.status, p.weight_percent, p.low95, p.high95, p.detection_limit,
         r.proportions.basis)
        for r in results for p in r.proportions.phases
    ]  # fmt: skip


def groups_rows(results: Iterable[SampleResult]) -> list[tuple[Cell, ...]]:
    """Rows of ``groups.csv``: one per sample and group of phases."""
    return [
        (r.sample, g.group, g.status, g.weight_percent, g.low95, g.high95, r.proportions.basis)
        for r in results
        for g in r.proportions.groups
    ]


def all_notes(result: SampleResult) -> tuple[str, ...]:
    """Every note that somebody reading the numbers must know, an assumed radiation first, each once."""
    assumed = [s.label for s in result.scans if s.radiation_origin == "assumed"]
    first = (f"radiation assumed for {', '.join(assumed)}",) if assumed else ()
    per_scan = tuple(f"{s.label}: {note}" for s in result.scans for note in s.notes)
    every = first + result.notes + result.findings.notes + result.proportions.notes + per_scan
    return tuple(dict.fromkeys(every))


def summary_rows(results: Iterable[SampleResult]) -> list[tuple[Cell, ...]]:
    """Rows of ``summary.csv``: one per sample."""
    rows: list[tuple[Cell, ...]] = []
    for r in results:
        weights = {p.phase: p.weight_percent for p in r.proportions.phases}
        present = []
        for f in r.findings.of_status("present", "trace"):
            weight = weights.get(f.phase)
            trace = " (trace)" if f.status == "trace" else ""
            present.append(f"{f.name}{trace}" if weight is None else f"{f.name}{trace} {weight:.1f}")
        s = r.swelling
        rows.append(
            (
                r.sample, s.verdict, s.expandable_percent, s.low95, s.high95, "; ".join(present),
                "; ".join(f.name for f in r.findings.of_status("possible")),
                r.proportions.quality.reduced_chi_square, "; ".join(all_notes(r)),
            )
        )  # fmt: skip
    return rows


def failures_rows(failures: Iterable[tuple[str, str]]) -> list[tuple[Cell, ...]]:
    """Rows of ``failures.csv``: sample and reason."""
    return [(sample, " ".join(reason.split())) for sample, reason in failures]


def _fixed(value: float | None, decimals: int) -> str | None:
    """Angles and spacings carry more digits than the weights and percentages of the other columns."""
    return None if value is None else f"{value:.{decimals}f}"


def evidence_rows(findings: Iterable[Findings]) -> list[tuple[Cell, ...]]:
    """One row per sample, phase and fact; a phase without facts has one row with its reason."""
    rows: list[tuple[Cell, ...]] = []
    for sample in findings:
        for f in sample.phases:
            start = (sample.sample, f.phase, f.name, f.group, f.status, f.reason)
            rows += [
                (*start, e.kind, e.text, e.weight, e.scan or None, _fixed(e.two_theta, 3), _fixed(e.d_observed, 4),
                 _fixed(e.d_error, 4), e.order, _fixed(e.d_expected, 4))
                for e in f.evidence
            ] or [(*start, *(None,) * 9)]  # fmt: skip
    return rows
