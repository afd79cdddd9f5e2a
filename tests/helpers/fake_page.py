"""Stand-in for `xrdmica.report.page`: the same calls, pages of a few lines."""

from __future__ import annotations

from pathlib import Path

from xrdmica.report.campaign import Campaign
from xrdmica.report.files import file_stem
from xrdmica.results import SampleResult


def write_sample_page(result: SampleResult, out: Path, *, shared_script: bool) -> Path:
    assert shared_script
    (out / "shared.js").write_text("// shared")
    page = out / f"{file_stem(result.sample)}.html"
    page.write_text(f"<p>{result.sample}: {result.proportions.phases[0].weight_percent}</p>", encoding="utf-8")
    return page


def write_overview(campaign: Campaign, out: Path) -> Path:
    page = out / "index.html"
    page.write_text("\n".join(f"{r.sample} {r.page} {r.failed}" for r in campaign.rows), encoding="utf-8")
    return page
