"""Tables for people in a terminal: what was found, how much, how sure, and what would settle what is open."""

from __future__ import annotations

import unicodedata
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING, TextIO

from rich.console import Console
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from xrdmica.report.cautions import GENERAL_CAUTIONS
from xrdmica.report.files import all_notes
from xrdmica.results import Evidence, Findings, PhaseFinding, PhaseWeight, SampleResult, ScanSummary

if TYPE_CHECKING:
    from rich.console import RenderableType

__all__ = [
    "GENERAL_CAUTIONS", "batch_table", "cautions_of", "console_for", "evidence_table", "list_section", "plain", "result_table",
    "verdict_words",
]  # fmt: skip

_WIDTH_OF_A_PIPE = 100
_STATUS_WORDS = {"present": "present", "trace": "trace", "possible": "possible", "not_detected": "not detected"}
_VERDICT_WORDS = {"yes": "YES", "no": "NO", "cannot tell": "CANNOT TELL"}


def console_for(stream: TextIO | None = None, *, stderr: bool = False) -> Console:
    """A console that never interprets names as markup; when piped it writes plain text of 100 columns.

    Parameters
    ----------
    stream : file, optional
        Where to; by default stdout, or stderr when `stderr` is set.
    """
    console = Console(file=stream, stderr=stderr, markup=False, emoji=False, highlight=False, soft_wrap=False)
    if not console.is_terminal:
        console = Console(
            file=stream, stderr=stderr, markup=False, emoji=False, highlight=False, width=_WIDTH_OF_A_PIPE, color_system=None
        )
    return console


def plain(text: object) -> str:
    """Text without control characters, so that no name can steer the terminal."""
    return " ".join("".join(" " if unicodedata.category(c) in ("Cc", "Cf", "Cs") else c for c in str(text)).split())


def _percent(value: float | None) -> str:
    if value is None:
        return ""
    return f"{value:.1f}" if abs(value) < 99.95 else f"{value:.0f}"


def _interval(low: float | None, high: float | None) -> str:
    return "" if low is None or high is None else f"{_percent(low)} – {_percent(high)}"


def verdict_words(result: SampleResult) -> str:
    """The swelling verdict in a few words, with the expandable share where it is known."""
    s = result.swelling
    words = _VERDICT_WORDS[s.verdict]
    if s.expandable_percent is not None and s.verdict != "no":
        words += f", {_percent(s.expandable_percent)} % expandable"
        words += f" ({_interval(s.low95, s.high95)})" if s.low95 is not None and s.high95 is not None else ""
    return words


def _table(*columns: tuple[str, str], wide: str = "") -> Table:
    """A quiet table: one rule under the head; `columns` are heads with ``"left"`` or ``"right"``."""
    table = Table(box=None, pad_edge=False, padding=(0, 3, 0, 0), header_style="underline")
    for head, side in columns:
        table.add_column(
            Text(head), justify="right" if side == "right" else "left", overflow="fold", no_wrap=side == "right",
            ratio=1 if head == wide else None,
        )  # fmt: skip
    return table


def _add(table: Table, *cells: str) -> None:
    table.add_row(*(Text(plain(cell)) for cell in cells))


def _section(console: Console, title: str, *body: RenderableType) -> None:
    console.print()
    console.print(Text(title, style="bold"))
    for part in body:
        if isinstance(part, Text) and not part:
            console.print()
        else:
            console.print(Padding(part, (0, 0, 0, 2), expand=False))


def _list(console: Console, title: str, lines: Iterable[str]) -> None:
    """A section of bulleted sentences; nothing when there are none."""
    lines = list(lines)
    if not lines:
        return
    grid = Table.grid(padding=(0, 1, 0, 0))
    for line in lines:
        grid.add_row(Text("-"), Text(plain(line)))
    _section(console, title, grid)


# ---------------------------------------------------------------- a finished sample


def result_table(result: SampleResult, console: Console) -> None:
    """Print a finished sample: verdict, proportions, what is open, and what the numbers rest on.

    Parameters
    ----------
    result : SampleResult
        Finished sample.
    console : rich.console.Console
        Where to; `console_for` makes one.
    """
    s = result.swelling
    console.print(Text(f"Sample {plain(result.sample)}", style="bold"))
    console.print(Text(f"Swelling: {verdict_words(result)}", style="bold"))
    console.print(Padding(Text(plain(s.reason)), (0, 0, 0, 2), expand=False))
    if s.measure_next:
        console.print(Padding(Text(f"To settle it: {plain(s.measure_next)}"), (0, 0, 0, 2), expand=False))
    _scans(result.scans, console)
    _weights(result, console)
    _alternatives(result.findings, console)
    warnings = result.proportions.warnings
    _list(console, "Warnings about the fit", [w.text for w in warnings if w.kind != "driver"])
    _list(console, "What the weights rest on", [w.text for w in warnings if w.kind == "driver"])
    _indices(result, console)
    _chemistry(result, console)
    _unassigned(result.findings, console)
    _measure_next(result.findings, console)
    _list(console, "Notes", (n for n in all_notes(result) if not n.startswith("radiation assumed for")))
    _list(console, "Cautions", result.cautions)


def _scans(scans: Sequence[ScanSummary], console: Console) -> None:
    moved = any(scan.displacement_mm is not None for scan in scans)
    last = (("displacement (mm)", "right"),) if moved else ()
    table = _table(("Scan", "left"), ("mount", "left"), ("radiation", "left"), ("known from", "left"), ("2θ range (°)", "right"),
                   ("points", "right"), *last, wide="Scan")  # fmt: skip
    for scan in scans:
        low, high = scan.two_theta_range
        origin = scan.radiation_origin.upper() if scan.radiation_origin == "assumed" else scan.radiation_origin
        displacement = "" if scan.displacement_mm is None else f"{scan.displacement_mm:+.3f}"
        _add(table, scan.label, scan.mount, scan.radiation, origin, f"{low:.2f} – {high:.2f}", str(scan.points),
             *((displacement,) if moved else ()))  # fmt: skip
    _section(console, "Scans", table)
    _radiation_warning(scans, console)


def _radiation_warning(scans: Sequence[ScanSummary], console: Console) -> None:
    guessed = [scan for scan in scans if scan.radiation_origin == "assumed"]
    if guessed:
        tubes = ", ".join(dict.fromkeys(scan.radiation for scan in guessed))
        which = ", ".join(scan.label for scan in guessed)
        console.print(
            Text(
                plain(
                    f"! Radiation {tubes} is ASSUMED for {which}: no file or sheet says it. All spacings depend on it; "
                    "if it is another tube, give --radiation or a radiation column."
                ),
                style="bold",
            )
        )


def _weights(result: SampleResult, console: Console) -> None:
    p = result.proportions
    head = ("group", "left"), ("status", "left"), ("wt %", "right"), ("95 % interval", "right")
    table = _table(("Phase", "left"), *head, ("detection limit", "right"), wide="Phase")
    for w in p.phases:
        if w.status != "not_detected":
            _add(table, w.name, w.group, _STATUS_WORDS[w.status], _percent(w.weight_percent), _interval(w.low95, w.high95),
                 _percent(w.detection_limit))  # fmt: skip
    body: list[RenderableType] = [table]
    if p.groups:
        groups = _table(("Group total", "left"), *head[1:], wide="Group total")
        for g in p.groups:
            if g.status != "not_detected" or g.weight_percent:
                _add(groups, g.group, _STATUS_WORDS[g.status], _percent(g.weight_percent), _interval(g.low95, g.high95))
        body += [Text(), groups]
    for sentence in _absent(p.phases):
        body += [Text(), Text(plain(sentence))]
    body += [Text(), Text(_basis_sentence(p.basis)), *_quality(result)]
    _section(console, "Proportions", *body)


def _absent(phases: Iterable[PhaseWeight]) -> list[str]:
    absent = [w for w in phases if w.status == "not_detected"]
    limited = [f"{w.name} (< {_percent(w.detection_limit)})" for w in absent if w.detection_limit is not None]
    others = [w.name for w in absent if w.detection_limit is None]
    out = [f"Not detected, with detection limit in wt %: {', '.join(limited)}"] if limited else []
    return out + ([f"Not detected, detection limit not known: {', '.join(others)}"] if others else [])


def _basis_sentence(basis: str) -> str:
    return f"100 % = {basis}; dry basis: structural OH counts, interlayer water and glycol do not. An empty cell is not known."


def _quality(result: SampleResult) -> list[Text]:
    q = result.proportions.quality
    parts = []
    if q.reduced_chi_square is not None:
        parts.append(f"reduced chi-square {q.reduced_chi_square:.2f}")
    if q.profile_residual_percent is not None:
        parts.append(f"weighted profile residual {q.profile_residual_percent:.1f} %")
    if not parts:
        return []
    end = "" if q.converged else "; the fit did NOT settle" + (f" ({plain(q.message)})" if q.message else "")
    return [Text(f"Fit: {', '.join(parts)}{end}.")]


def _alternatives(findings: Findings, console: Console) -> None:
    table = _table(("Phase", "left"), ("could also be", "left"), ("what would tell", "left"), wide="what would tell")
    for f in findings.of_status("present", "trace", "possible"):
        for k, other in enumerate(f.alternatives):
            _add(table, f.name if k == 0 else "", other.name, other.told_by)
    if table.row_count:
        _section(console, "These scans cannot tell", table)


def _unassigned(findings: Findings, console: Console) -> None:
    if not findings.unassigned:
        return
    table = _table(("Scan", "left"), ("2θ (°)", "right"), ("d (Å)", "right"), ("height / error", "right"), ("may be", "left"),
                   wide="may be")  # fmt: skip
    for line in findings.unassigned:
        _add(table, line.scan, f"{line.two_theta:.2f}", f"{line.d_spacing:.3f}", f"{line.height_sigma:.0f}",
             ", ".join(line.suggestions))  # fmt: skip
    _section(console, "Lines that no accepted phase explains", table)


# ---------------------------------------------------------------- evidence


def evidence_table(
    findings: Findings, console: Console, *, scans: Sequence[ScanSummary] = (), most: int | None = 8
) -> None:
    """Print the decision on every phase with the facts for (+) and against (-) it.

    Parameters
    ----------
    findings : Findings
        Decisions on one sample.
    console : rich.console.Console
        Where to.
    scans : sequence of ScanSummary
        The scans used; when given, they are listed with their radiation.
    most : int or None
        Facts printed per phase, the weightiest first; None prints all.
    """
    console.print(Text(f"Sample {plain(findings.sample)}", style="bold"))
    if scans:
        _scans(scans, console)
    for f in findings.of_status("present", "trace", "possible"):
        _one_phase(f, console, most)
    if not findings.of_status("present", "trace", "possible"):
        _section(console, "No phase of the library was found")
    _unassigned(findings, console)
    absent = findings.of_status("not_detected")
    if absent:
        table = _table(("Phase", "left"), ("why not", "left"), wide="why not")
        for f in absent:
            _add(table, f.name, f.reason)
        _section(console, "Not detected", table)
    _measure_next(findings, console)
    _list(console, "Notes", findings.notes)


def _indices(result: SampleResult, console: Console) -> None:
    """Indices that could be computed; the reasons for the others are in the JSON."""
    there = [index for index in result.indices if index.value is not None]
    if not there:
        return
    table = _table(("Index", "left"), ("value", "right"), ("error", "right"), ("unit", "left"), ("scan", "left"), wide="Index")
    for index in there:
        error = "" if index.standard_error is None else f"{index.standard_error:.3g}"
        _add(table, index.name, f"{index.value:.3g}", error, index.unit, index.scan)
    _section(console, "Indices (definitions, sources and weaknesses in the JSON)", table)


def _chemistry(result: SampleResult, console: Console) -> None:
    check = result.chemistry
    if check is None:
        return
    table = _table(("Oxide", "left"), ("measured", "right"), ("implied", "right"), ("95 % range", "right"), ("sigma", "right"))
    for row in check.oxides:
        span = "" if row.implied_low is None else f"{row.implied_low:.1f} – {row.implied_high:.1f}"
        far = "" if row.misfit_sigma is None else f"{row.misfit_sigma:+.1f}"
        _add(table, row.oxide, f"{row.measured:.2f}", f"{row.implied:.2f}", span, far)
    _section(console, f"Analysis: {plain(check.text)}", table)
    _list(console, "What would reconcile them", check.reconcile)
    if check.joint:
        _list(console, "Scans and analysis together", (
            f"{row.name}: {row.weight_percent:.1f} % ({row.low95:.1f} – {row.high95:.1f})" for row in check.joint
            if row.weight_percent is not None
        ))  # fmt: skip


def _measure_next(findings: Findings, console: Console) -> None:
    """What would settle the open questions, then what each candidate would show there."""
    _list(console, "Measure next", findings.measure_next)
    lines = [
        f"{step.measurement}: " + "; ".join(f"{outcome.name}: {outcome.text}" for outcome in step.outcomes)
        for step in findings.next_measurements
    ]
    _list(console, "What would then be seen (calculated)", lines)


def _one_phase(f: PhaseFinding, console: Console, most: int | None) -> None:
    spacing = "" if f.basal_spacing is None else f", basal spacing {f.basal_spacing:.2f} Å"
    body: list[RenderableType] = [Text(plain(f.reason))]
    if f.states:
        body.append(Text(plain("States: " + "; ".join(f"{scan}: {state}" for scan, state in f.states.items()))))
    if f.evidence:
        table = _table(("", "left"), ("weight", "right"), ("Evidence", "left"), ("scan", "left"), ("2θ (°)", "right"),
                       ("d found (Å)", "right"), ("expected", "right"), wide="Evidence")  # fmt: skip
        ranked = sorted(f.evidence, key=lambda e: -abs(e.weight))
        for e in ranked[:most]:
            _add(table, *_evidence_cells(e))
        body.append(table)
        rest = ranked[most:] if most is not None else []
        if rest:
            against = sum(e.weight < 0 for e in rest)
            body.append(Text(f"{len(rest)} lighter facts are not shown, {against} of them against it"))
    for other in f.alternatives:
        body.append(Text(plain(f"Could also be {other.name}; what would tell: {other.told_by}")))
    _section(console, f"{plain(f.name)} ({plain(f.group)}): {_STATUS_WORDS[f.status]}{spacing}", *body)


def _evidence_cells(e: Evidence) -> tuple[str, ...]:
    order = "" if e.order is None else f"00{e.order}" if e.order < 10 else f"00,{e.order}"
    found = "" if e.d_observed is None else f"{e.d_observed:.3f}" + ("" if e.d_error is None else f" ± {e.d_error:.3f}")
    return (
        "+" if e.weight > 0 else "-" if e.weight < 0 else "",
        f"{abs(e.weight):.1f}",
        e.text if not order or order in e.text else f"{order}: {e.text}",
        e.scan,
        "" if e.two_theta is None else f"{e.two_theta:.2f}",
        found,
        "" if e.d_expected is None else f"{e.d_expected:.3f}",
    )


# ---------------------------------------------------------------- a batch


def batch_table(results: Sequence[SampleResult], console: Console, *, phases: int = 4) -> None:
    """Print one line per sample: swelling verdict and the heaviest phases.

    Parameters
    ----------
    results : sequence of SampleResult
        Finished samples in the order to be shown.
    console : rich.console.Console
        Where to.
    phases : int
        How many phases to name per sample.
    """
    table = _table(("Sample", "left"), ("swelling", "left"), ("main phases, wt %", "left"), ("possible (?)", "left"),
                   wide="main phases, wt %")  # fmt: skip
    for result in results:
        heavy = sorted(
            (w for w in result.proportions.phases if w.weight_percent is not None and w.status != "not_detected"),
            key=lambda w: -(w.weight_percent or 0.0),
        )
        doubt = {"possible": "?", "trace": " (trace)"}
        named = ", ".join(
            f"{w.name}{doubt.get(w.status, '')} {_percent(w.weight_percent)}" for w in heavy[:phases] if w.weight_percent
        )
        more = len([w for w in heavy[phases:] if w.weight_percent])
        named += f", {more} more" if more else ""
        open_ = ", ".join(f.name for f in result.findings.of_status("possible"))
        _add(table, result.sample, verdict_words(result), named, open_)
    console.print(table)


def cautions_of(results: Sequence[SampleResult]) -> list[str]:
    """Cautions of many samples: those of all samples, then those of some with their names; the general ones without any."""
    samples: dict[str, list[str]] = {}
    for result in results:
        for caution in result.cautions:
            samples.setdefault(caution, []).append(result.sample)
    shared = [caution for caution, names in samples.items() if len(names) == len(results)]
    out = shared or list(GENERAL_CAUTIONS)
    for caution, names in samples.items():
        if len(names) < len(results):
            more = f" and {len(names) - 5} more" if len(names) > 5 else ""
            out.append(f"{caution} ({', '.join(names[:5])}{more})")
    return out


def list_section(console: Console, title: str, lines: Iterable[str]) -> None:
    """Print a titled list of sentences; nothing when there are none."""
    _list(console, title, lines)
