"""Tables, figures and the overview over all samples of a run, made from the result files one after the other."""

from __future__ import annotations

import dataclasses
import sys
from collections.abc import Callable, Iterable, Mapping, Sequence
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path

from xrdmica.batch.repeats import REPEATS_HEADER, RepeatCollector, repeats_rows
from xrdmica.batch.resume import read_head
from xrdmica.batch.similar import group_similar
from xrdmica.batch.store import csv_table, replace_bytes
from xrdmica.errors import XrdmicaError
from xrdmica.report.campaign import Campaign, CampaignRow
from xrdmica.report.campaign_figures import FIGURE_FILES, campaign_figures
from xrdmica.report.files import (
    FAILURES_HEADER,
    GROUPS_HEADER,
    PROPORTIONS_HEADER,
    SUMMARY_HEADER,
    failures_rows,
    groups_rows,
    proportions_rows,
    summary_rows,
)
from xrdmica.report.rows import Cell
from xrdmica.results import SampleResult

__all__ = ["INDICES_HEADER", "Ended", "campaign_of", "indices_rows", "quality_flags", "write_campaign"]

INDICES_HEADER = ("sample", "index", "name", "value", "standard_error", "unit", "scan", "reason")
_WIDE = (
    "sample", "swelling", "expandable_percent", "low95", "high95", "reduced_chi_square", "similar_group", "flags",
)  # fmt: skip
_ALL = "(all samples)"
_POOR_FIT = 3.0  # reduced chi-square, with the model error in the weights: beyond it the scans hold something unexplained


@dataclass(frozen=True)
class Ended:
    """What became of a sample.

    Attributes
    ----------
    sample : str
    stem : str or None
        Name of its files without suffix; None when it has no result.
    reason : str
        Why it failed, or why its figure is wanting; empty when all is well.
    """

    sample: str
    stem: str | None
    reason: str = ""


def indices_rows(result: SampleResult) -> list[tuple[Cell, ...]]:
    """Rows of ``indices.csv`` for a sample: one per index, also those that were not computed, with the reason."""
    return [
        (result.sample, i.id, i.name, i.value, i.standard_error, i.unit, i.scan, i.reason) for i in result.indices
    ]


_TABLES: tuple[tuple[str, Sequence[str], Callable[[SampleResult], list[tuple[Cell, ...]]]], ...] = (
    ("proportions.csv", PROPORTIONS_HEADER, lambda result: proportions_rows([result])),
    ("groups.csv", GROUPS_HEADER, lambda result: groups_rows([result])),
    ("summary.csv", SUMMARY_HEADER, lambda result: summary_rows([result])),
    ("indices.csv", INDICES_HEADER, indices_rows),
)


def quality_flags(result: SampleResult) -> tuple[str, ...]:
    """What a reader should look at before trusting the numbers of a sample, a few words each."""
    quality = result.proportions.quality
    flags = []
    if quality.reduced_chi_square is not None and quality.reduced_chi_square > _POOR_FIT:
        flags.append("poor fit")
    if quality.evaluations and not quality.converged:
        flags.append("fit not converged")
    if result.swelling.verdict == "cannot tell":
        flags.append("swelling open")
    if result.findings.of_status("possible"):
        flags.append("phases open")
    if result.findings.unassigned:
        flags.append(f"{len(result.findings.unassigned)} unassigned lines")
    if any(scan.radiation_origin == "assumed" for scan in result.scans):
        flags.append("radiation assumed")
    oriented = [scan.treatment for scan in result.scans if scan.mount == "oriented"]
    if oriented and not any(treatment.endswith(("glycolated", "glycerolated")) for treatment in oriented):
        flags.append("no glycol scan")
    if any(parameter.at_limit for parameter in result.proportions.parameters):
        flags.append("parameter at its limit")
    if result.chemistry is not None and result.chemistry.agrees is False:
        flags.append("chemistry disagrees")
    flags += [warning.kind for warning in result.proportions.warnings if warning.kind != "driver"]
    return tuple(sys.intern(flag) for flag in dict.fromkeys(flags))


def campaign_of(
    results: Iterable[SampleResult], *, title: str = "", pages: Mapping[str, str] | None = None,
    failures: Sequence[tuple[str, str]] = (), collector: RepeatCollector | None = None,
) -> Campaign:  # fmt: skip
    """What many samples come to; results may come from an iterator and are not kept.

    Parameters
    ----------
    results : iterable of SampleResult
        Finished samples in the order of the sheet.
    title : str
        Of the overview.
    pages : mapping, optional
        Sample -> its page, relative to the overview.
    failures : sequence of (sample, reason)
        Samples without a result; they stand at the end.
    collector : RepeatCollector, optional
        For samples that the sheet marks; by default one that knows the standards only.

    Returns
    -------
    Campaign
        Without figures.
    """
    marked = collector or RepeatCollector()
    rows = []
    for result in results:
        marked.add(result)
        rows.append(_row(result, (pages or {}).get(result.sample, "")))
    rows += [CampaignRow(sample, failed=reason) for sample, reason in failures]
    return Campaign(title, _with_groups(rows), marked.repeats())


def _row(result: SampleResult, page: str) -> CampaignRow:
    swelling = result.swelling
    return CampaignRow(
        result.sample, page, swelling.verdict, swelling.expandable_percent, swelling.low95, swelling.high95,
        {sys.intern(p.name): p.weight_percent for p in result.proportions.phases if p.weight_percent is not None},
        {sys.intern(g.group): g.weight_percent for g in result.proportions.groups if g.weight_percent is not None},
        result.proportions.quality.reduced_chi_square, quality_flags(result),
    )  # fmt: skip


def _with_groups(rows: Sequence[CampaignRow]) -> tuple[CampaignRow, ...]:
    grouping = group_similar([row.phases for row in rows])
    return tuple(
        dataclasses.replace(row, cluster=group, flags=(*row.flags, "unlike the others") if apart else row.flags)
        for row, group, apart in zip(rows, grouping.groups, grouping.apart, strict=True)
    )


def write_campaign(
    out: Path, samples: Sequence[Ended], *, details: Iterable[Mapping[str, str]] = (),
    figures: bool = True, report: bool = False, bom: bool = False, title: str = "",
) -> Campaign:  # fmt: skip
    """Write everything over all samples; the result files are read one after the other and not kept.

    Parameters
    ----------
    out : Path
        Output folder with the result files.
    samples : sequence of Ended
        In the order of the sheet.
    details : iterable of mapping
        What the sheet says about each sample.
    figures, report, bom : bool
        Whether to draw the figures, write the overview, and mark tables as UTF-8.
    title : str
        Of the overview.

    Returns
    -------
    Campaign

    Raises
    ------
    XrdmicaError
        If something cannot be written, or a result file went away meanwhile.
    """
    collector = RepeatCollector(RepeatCollector.originals_of(details))
    rows: list[CampaignRow] = []
    with ExitStack() as stack:
        tables = [(stack.enter_context(csv_table(out / name, header, bom=bom)), of) for name, header, of in _TABLES]
        for ended in samples:
            if ended.stem is None:
                rows.append(CampaignRow(ended.sample, failed=ended.reason))
                continue
            result = _read(out, ended)
            for write, rows_of in tables:
                write(rows_of(result))
            collector.add(result)
            rows.append(_row(result, f"{ended.stem}.html" if (out / f"{ended.stem}.html").exists() else ""))
    campaign = Campaign(title, _with_groups(rows), collector.repeats())
    _write_wide(out / "proportions_wide.csv", campaign, bom)
    _write_some(out / "repeats.csv", REPEATS_HEADER, repeats_rows(campaign.repeats), bom)
    campaign, wanting = _drawn(out, campaign) if figures else (campaign, [])
    for name in set(FIGURE_FILES) - set(campaign.figures.values()):
        (out / name).unlink(missing_ok=True)
    wanting += _overview(out, campaign) if report else []
    if not report:
        (out / "index.html").unlink(missing_ok=True)
    failures = [(ended.sample, ended.reason) for ended in samples if ended.reason]
    _write_some(out / "failures.csv", FAILURES_HEADER, failures_rows([*failures, *wanting]), bom)
    return campaign


def _drawn(out: Path, campaign: Campaign) -> tuple[Campaign, list[tuple[str, str]]]:
    """The campaign with its figures written; a figure that fails does not take the tables with it."""
    try:
        drawn = campaign_figures(campaign)
    except Exception as error:
        return campaign, [(_ALL, f"all samples are complete, but the figures over them could not be drawn: {error}")]
    for name, (_, content) in drawn.items():
        replace_bytes(out / name, content)
    return dataclasses.replace(campaign, figures={caption: name for name, (caption, _) in drawn.items()}), []


def _overview(out: Path, campaign: Campaign) -> list[tuple[str, str]]:
    try:
        from xrdmica.report.page import write_overview  # type: ignore[import-not-found, unused-ignore]

        write_overview(campaign, out)
    except XrdmicaError:
        raise
    except Exception as error:
        return [(_ALL, f"all samples are complete, but the overview could not be written: {error}")]
    return []


def _read(out: Path, ended: Ended) -> SampleResult:
    result = read_head(out / f"{ended.stem}.json")
    if result is None or result.sample != ended.sample:
        raise XrdmicaError(
            f"{out / str(ended.stem)}.json: the result of {ended.sample} is gone or was changed",
            why="while the run was under way", fix="repeat the command: what is there is kept",
        )  # fmt: skip
    return result


def _write_wide(path: Path, campaign: Campaign, bom: bool) -> None:
    """One row per finished sample; phases as columns, those with most weight over all samples first."""
    totals: dict[str, float] = {}
    for row in campaign.rows:
        for phase, weight in row.phases.items():
            totals[phase] = totals.get(phase, 0.0) + weight
    phases = sorted(totals, key=lambda phase: (-totals[phase], phase))
    with csv_table(path, (*_WIDE, *phases), bom=bom) as write:
        for row in campaign.rows:
            if row.failed:
                continue
            write([(
                row.sample, row.verdict, row.expandable, row.low95, row.high95, row.reduced_chi_square, row.cluster,
                "; ".join(row.flags), *(row.phases.get(phase) for phase in phases),
            )])  # fmt: skip


def _write_some(path: Path, header: Sequence[str], rows: Sequence[Sequence[Cell]], bom: bool) -> None:
    """A table only when it has rows; an old one goes."""
    if not rows:
        path.unlink(missing_ok=True)
        return
    with csv_table(path, header, bom=bom) as write:
        write(rows)
