"""Results as a notebook shows them, and as tables of pandas."""

from __future__ import annotations

from collections.abc import Sequence
from html import escape
from typing import TYPE_CHECKING, Any

from xrdmica.report.page.words import ANSWERS, STATUS_WORDS, verdict_sentences
from xrdmica.report.rows import EVIDENCE_HEADER
from xrdmica.report.styles import GROUP_COLOURS, OTHER_COLOUR
from xrdmica.report.tables import plain
from xrdmica.results import Findings, Proportions, SampleResult

if TYPE_CHECKING:
    from pandas import DataFrame

__all__ = ["dataframe_of", "html_of"]


def _text(value: object) -> str:
    return escape(plain(value))


def _number(value: float | None) -> str:
    return "" if value is None else f"{value:.1f}"


def _bar(weight: float | None, low: float | None, high: float | None, group: str) -> str:
    """Interval and estimate on a scale from 0 to 100 wt %."""
    colour = GROUP_COLOURS.get(group, OTHER_COLOUR)
    parts = ['<rect x="0" y="6.5" width="100" height="1" fill="currentColor" fill-opacity="0.25"/>']
    if low is not None and high is not None:
        wide = max(min(high, 100.0) - max(low, 0.0), 0.5)
        parts.append(f'<rect x="{max(low, 0.0):.1f}" y="4" width="{wide:.1f}" height="6" fill="{colour}" fill-opacity="0.4"/>')
    if weight is not None:
        parts.append(f'<rect x="{max(weight - 0.6, 0):.1f}" y="1" width="1.2" height="12" fill="{colour}"/>')
    frame = 'width="150" height="14" viewBox="0 0 100 14" preserveAspectRatio="none" aria-hidden="true"'
    return f"<svg {frame}>{''.join(parts)}</svg>"


def _table(caption: str, header: tuple[str, ...], rows: Sequence[tuple[str, ...]]) -> str:
    """A table of cells that are HTML already."""
    head = "".join(f'<th scope="col" style="text-align:left">{_text(name)}</th>' for name in header)
    body = "".join("<tr>" + "".join(f'<td style="text-align:left">{cell}</td>' for cell in row) + "</tr>" for row in rows)
    return f"<table><caption>{_text(caption)}</caption><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"


def _proportions(p: Proportions) -> str:
    shown = sorted((w for w in p.phases if w.status != "not_detected"), key=lambda w: -(w.weight_percent or -1.0))
    rows = [
        (f"<b>{_text(w.name)}</b>", _bar(w.weight_percent, w.low95, w.high95, w.group), _number(w.weight_percent),
         "" if w.low95 is None or w.high95 is None else f"{w.low95:.1f} – {w.high95:.1f}", STATUS_WORDS[w.status])
        for w in shown
    ]  # fmt: skip
    caption = f"{plain(p.sample)}: 100 % = {p.basis}, dry"
    return _table(caption, ("phase", "0 – 100 %", "wt %", "95 % interval", "status"), rows)


def _findings(f: Findings) -> str:
    rows = [
        (f"<b>{_text(x.name)}</b>", STATUS_WORDS[x.status], _text(x.reason),
         "<br>".join(f"{_text(a.name)}: {_text(a.told_by)}" for a in x.alternatives))
        for x in f.of_status("present", "trace", "possible")
    ]  # fmt: skip
    table = _table(plain(f.sample), ("phase", "status", "why", "could also be, and what would tell"), rows)
    absent = ", ".join(_text(x.name) for x in f.of_status("not_detected"))
    folded = f"<details><summary>considered and not detected</summary>{absent}</details>" if absent else ""
    return table + folded


def html_of(record: SampleResult | Findings | Proportions) -> str:
    """A record as HTML without scripts or style sheets; every text from files is escaped.

    Parameters
    ----------
    record : SampleResult, Findings or Proportions
        What to show.

    Returns
    -------
    str
        HTML.
    """
    if isinstance(record, Proportions):
        return f"<div>{_proportions(record)}</div>"
    if isinstance(record, Findings):
        return f"<div>{_findings(record)}</div>"
    first, second = verdict_sentences(record)
    head = f"<p><b>{_text(record.sample)}: {ANSWERS[record.swelling.verdict]}.</b> {_text(first)} {_text(second)}</p>"
    cautions = "".join(f"<li>{_text(c)}</li>" for c in record.cautions)
    end = f"<details><summary>cautions</summary><ul>{cautions}</ul></details>" if cautions else ""
    return f"<div>{head}{_proportions(record.proportions)}{end}</div>"


def dataframe_of(record: SampleResult | Findings | Proportions) -> DataFrame:
    """A record as a table: phases with weights, or for findings one row per fact.

    Parameters
    ----------
    record : SampleResult, Findings or Proportions
        What to tabulate.

    Returns
    -------
    pandas.DataFrame
        Weights and limits in wt %, angles in degree, spacings in angstrom; unknown numbers are missing (nan).
    """
    from pandas import DataFrame

    if isinstance(record, Findings):
        return DataFrame(_facts(record), columns=list(EVIDENCE_HEADER))
    proportions = record.proportions if isinstance(record, SampleResult) else record
    table = DataFrame([{"sample": proportions.sample, **w.model_dump(), "basis": proportions.basis} for w in proportions.phases])
    numbers = ["weight_percent", "low95", "high95", "standard_error", "detection_limit"]
    return table.astype({name: float for name in numbers if name in table})


def _facts(findings: Findings) -> list[tuple[Any, ...]]:
    """Facts with numbers as numbers, in the columns of the evidence table."""
    out: list[tuple[Any, ...]] = []
    for f in findings.phases:
        start = (findings.sample, f.phase, f.name, f.group, f.status, f.reason)
        out += [
            (*start, e.kind, e.text, e.weight, e.scan or None, e.two_theta, e.d_observed, e.d_error, e.order, e.d_expected)
            for e in f.evidence
        ] or [(*start, *(None,) * 9)]
    return out
