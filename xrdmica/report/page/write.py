"""Pages of samples and the overview of a campaign, written as files."""

from __future__ import annotations

import base64
from collections.abc import Iterable
from pathlib import Path
from typing import Any

from xrdmica.errors import XrdmicaError
from xrdmica.report.campaign import Campaign, CampaignRow
from xrdmica.report.cautions import GENERAL_CAUTIONS
from xrdmica.report.files import all_notes, plan_stems, write_text
from xrdmica.report.page.curves import plot_data
from xrdmica.report.page.render import plotting_script, render, safe_json
from xrdmica.report.page.words import ANSWERS, STATUS_WORDS, verdict_sentences
from xrdmica.report.styles import GROUP_COLOURS, phase_styles
from xrdmica.results import SampleResult

__all__ = ["OVERVIEW_FILE", "PLOTTING_FILE", "sample_page", "write_overview", "write_pages", "write_sample_page"]

PLOTTING_FILE = "plotting.js"
OVERVIEW_FILE = "index.html"
_PAGE_BYTES = 480_000  # a page of a campaign stays below 500 kB
_CHART = 300.0  # width of a bar for 100 % [user units of the drawing]


def _target(out: Path, name: str) -> Path:
    out = Path(out)
    return out if out.suffix.lower() in (".html", ".htm") else out / name


def _bars(result: SampleResult) -> list[dict[str, Any]]:
    """Rows of the proportions: every phase that is there or may be, the heaviest first."""
    styles = phase_styles(result)
    rows = []
    shown = [w for w in result.proportions.phases if w.status != "not_detected"]
    for w in sorted(shown, key=lambda w: -(w.weight_percent if w.weight_percent is not None else -1.0)):
        high = w.high95 if w.high95 is not None else w.weight_percent
        rows.append(
            {
                "weight": w, "status": STATUS_WORDS[w.status], "symbol": styles[w.phase].symbol if w.phase in styles else "",
                "group_class": _group_class(w.group),
                "x": None if w.weight_percent is None else round(_CHART * w.weight_percent / 100, 1),
                "low": None if w.low95 is None else round(_CHART * max(w.low95, 0.0) / 100, 1),
                "high": None if high is None or w.low95 is None else round(_CHART * min(high, 100.0) / 100, 1),
            }
        )  # fmt: skip
    return rows


def _group_class(group: str) -> str:
    return "g-" + group.replace(" ", "-") if group in GROUP_COLOURS else "g-other"


def _core(parts: Iterable[tuple[str, str, float]]) -> list[dict[str, Any]]:
    """Slices of the bar that shows a sample as a whole: name, class of the group, place and width in percent."""
    at, out = 0.0, []
    for name, group, weight in parts:
        if weight > 0:
            out.append({"name": name, "group_class": _group_class(group), "x": round(at, 2), "width": round(weight, 2),
                        "weight": weight})  # fmt: skip
            at += weight
    return out


def sample_page(result: SampleResult, *, beside: str = "", overview: str = "") -> str:
    """The page of one sample.

    Parameters
    ----------
    result : SampleResult
        Finished sample.
    beside : str
        File beside the page with the plotting library; empty to write the library into the page.
    overview : str
        File beside the page with the overview of its campaign; empty when there is none.

    Returns
    -------
    str
        HTML.
    """
    styles = phase_styles(result)
    plotting = (beside or "inline") if result.curves else ""
    rank = {"present": 0, "trace": 1, "possible": 2, "not_detected": 3}
    weights = {w.phase: w for w in result.proportions.phases}
    heavy = {phase: w.weight_percent or 0.0 for phase, w in weights.items()}
    ordered = sorted(result.findings.phases, key=lambda f: (rank[f.status], -heavy.get(f.phase, 0.0)))
    bars = _bars(result)
    values: dict[str, Any] = {
        "result": result, "sentences": verdict_sentences(result), "answer": ANSWERS[result.swelling.verdict], "bars": bars,
        "core": _core((r["weight"].name, r["weight"].group, r["weight"].weight_percent or 0.0) for r in bars),
        "found": [f for f in ordered if f.status != "not_detected"],
        "absent": [f for f in ordered if f.status == "not_detected"],
        "weights": weights, "status_words": STATUS_WORDS, "notes": all_notes(result), "overview": overview,
        "phases": [{"style": s, "group_class": _group_class(_group_of(result, s.phase))} for s in styles.values()],
        "cautions": result.cautions or GENERAL_CAUTIONS,
        "group_rows": [g for g in result.proportions.groups if g.status != "not_detected" or g.weight_percent],
    }  # fmt: skip
    page, every = "", 1
    while True:
        data = plot_data(result, styles, every=every)
        page = render("sample.html.j2", scripts=("page.js", "scans.js") if plotting else ("page.js",), plotting=plotting,
                      data=_markup(safe_json(data)), every=data["every"], **values)  # fmt: skip
        if not beside or every >= 16 or len(page.encode("utf-8", errors="replace")) <= _PAGE_BYTES:
            return page
        every += 1


def _group_of(result: SampleResult, phase: str) -> str:
    finding = result.findings.get(phase)
    return finding.group if finding else next((w.group for w in result.proportions.phases if w.phase == phase), "")


def _markup(text: str) -> Any:
    from markupsafe import Markup

    return Markup(text)


def write_sample_page(result: SampleResult, out: Path, *, shared_script: bool = False) -> Path:
    """Write the page of one sample.

    Parameters
    ----------
    result : SampleResult
        Finished sample.
    out : pathlib.Path
        A file ending in ``.html``, or a folder in which the page gets the name of the sample.
    shared_script : bool
        Whether the plotting library is stored once beside the pages (``plotting.js``, written when it is not there or
        differs) and the overview linked; otherwise the page is one file that needs no other.

    Returns
    -------
    pathlib.Path
        The page.

    Raises
    ------
    XrdmicaError
        If it cannot be written.
    """
    target = _target(out, f"{plan_stems([result.sample])[result.sample]}.html")
    if shared_script:
        _store_script(target.parent)
    page = sample_page(result, beside=PLOTTING_FILE if shared_script else "", overview=OVERVIEW_FILE if shared_script else "")
    return write_text(target, _encodable(page))


def _encodable(page: str) -> str:
    """Lone surrogates of broken file names cannot be written as UTF-8."""
    return page.encode("utf-8", errors="replace").decode("utf-8")


def _store_script(folder: Path) -> Path:
    path, text = folder / PLOTTING_FILE, plotting_script()
    if path.is_file() and path.stat().st_size == len(text.encode()) and path.read_text(encoding="utf-8") == text:
        return path
    return write_text(path, text)


def _figure_data(folder: Path, name: str) -> str:
    """A figure beside the overview as a data address, so that the page asks for no file."""
    path = folder / name
    try:
        content = path.read_bytes()
    except OSError as error:
        raise XrdmicaError(f"{path}: the figure cannot be read", why=error.strerror, fix="make the figures first") from error
    kind = "image/png" if path.suffix.lower() == ".png" else "image/svg+xml"
    return f"data:{kind};base64,{base64.b64encode(content).decode()}"


def write_overview(campaign: Campaign, out: Path) -> Path:
    """Write the page that links all samples of a campaign.

    Parameters
    ----------
    campaign : Campaign
        Rows, repeats and figures; files are relative to the overview.
    out : pathlib.Path
        A file ending in ``.html``, or a folder in which the page is called ``index.html``.

    Returns
    -------
    pathlib.Path
        The page.

    Raises
    ------
    XrdmicaError
        If a figure cannot be read or the page cannot be written.
    """
    target = _target(out, OVERVIEW_FILE)
    rows: list[dict[str, Any]] = []
    for row in campaign.rows:
        groups = list(row.groups.items()) or [(name, weight) for name, weight in row.phases.items()]
        parts = [(g, g, w) for g, w in groups if g != "expandable layers"]
        rows.append({
            "row": row, "answer": ANSWERS.get(row.verdict, ""), "core": _core(sorted(parts, key=lambda p: -p[2])),
            "phases": sorted(row.phases.items(), key=lambda p: -p[1]), "page": _address(row.page),
        })  # fmt: skip
    counts = {v: sum(r.verdict == v for r in campaign.rows) for v in ANSWERS}
    figures = {caption: _figure_data(target.parent, name) for caption, name in campaign.figures.items()}
    page = render(
        "overview.html.j2", scripts=("page.js",), campaign=campaign, rows=rows, counts=counts, figures=figures,
        failed=[r for r in campaign.rows if r.failed], clusters=any(r.cluster is not None for r in campaign.rows),
        groups_shown=[g for g in GROUP_COLOURS if any(part["name"] == g for r in rows for part in r["core"])],
        group_class=_group_class, cautions=GENERAL_CAUTIONS,
    )  # fmt: skip
    return write_text(target, _encodable(page))


def _address(page: str) -> str:
    """The address of a file beside the page; percent signs and letters of any script are quoted."""
    from urllib.parse import quote

    return "./" + quote(page.replace("\\", "/"), errors="replace") if page else ""


def _row(result: SampleResult, page: str) -> CampaignRow:
    s, q = result.swelling, result.proportions.quality
    flags = tuple(dict.fromkeys(w.kind for w in result.proportions.warnings))
    flags += () if q.converged or q.reduced_chi_square is None else ("fit did not settle",)
    flags += ("radiation assumed",) if any(scan.radiation_origin == "assumed" for scan in result.scans) else ()
    flags += (f"{len(result.findings.unassigned)} lines unexplained",) if result.findings.unassigned else ()
    weighed = [w for w in result.proportions.phases if w.status != "not_detected"]
    return CampaignRow(
        sample=result.sample, page=page, verdict=s.verdict, expandable=s.expandable_percent, low95=s.low95, high95=s.high95,
        phases={w.name: w.weight_percent for w in weighed if w.weight_percent is not None},
        groups={g.group: g.weight_percent for g in result.proportions.groups if g.weight_percent},
        reduced_chi_square=q.reduced_chi_square, flags=flags,
    )  # fmt: skip


def write_pages(results: Iterable[SampleResult], out: Path, campaign: Campaign | None = None) -> list[Path]:
    """Write a page per sample; for more than one sample, or with a campaign, also the overview.

    Parameters
    ----------
    results : iterable of SampleResult
        Finished samples; taken one after the other, so that many fit into memory.
    out : pathlib.Path
        Folder.
    campaign : Campaign, optional
        What the overview shows; by default made from the results. Rows without a page get the one written here.

    Returns
    -------
    list of pathlib.Path
        The pages, the overview first when there is one.

    Raises
    ------
    XrdmicaError
        If a page cannot be written.
    """
    from dataclasses import replace

    out = Path(out)
    stream = iter(results)
    first = [r for _, r in zip(range(2), stream, strict=False)]
    if len(first) < 2 and campaign is None:
        return [write_sample_page(result, out) for result in first]
    pages: dict[str, Path] = {}
    rows: list[CampaignRow] = []
    taken: set[str] = {"index", "plotting"}

    def one(result: SampleResult) -> None:
        stem = plan_stems([result.sample])[result.sample]
        number, free = 2, stem
        while free.casefold() in taken:
            free, number = f"{stem} ({number})", number + 1
        taken.add(free.casefold())
        path = write_sample_page(result, out / f"{free}.html", shared_script=True)
        pages[result.sample] = path
        rows.append(_row(result, path.name))

    for result in first:
        one(result)
    for result in stream:
        one(result)
    if campaign is None:
        campaign = Campaign(title=f"{len(rows)} samples", rows=tuple(rows))
    else:
        known = tuple(
            replace(row, page=pages[row.sample].name) if not row.page and row.sample in pages else row for row in campaign.rows
        )
        campaign = replace(campaign, rows=known)
    return [write_overview(campaign, out), *pages.values()]
