"""Pages as text: complete, locked, deaf to markup in names, small enough."""

from __future__ import annotations

import base64
import hashlib
import html
import json
import re
from dataclasses import replace
from pathlib import Path

import pytest

from xrdmica.errors import XrdmicaError
from xrdmica.report.campaign import Campaign, CampaignRow, Repeat
from xrdmica.report.page import write_overview, write_pages, write_sample_page
from xrdmica.report.page.render import asset, plotting_script, safe_json
from xrdmica.report.page.words import verdict_sentences
from xrdmica.results import (
    ChemistryCheck,
    FitWarning,
    IndexValue,
    NextMeasurement,
    Outcome,
    OxideMisfit,
    SampleResult,
)

HOSTILE = [
    "<script>alert(1)</script>", "</script><script>alert(1)</script>", "a\"b'c", "<img src=x onerror=alert(1)>", "{{ 7*7 }}",
    "عينة-٧", "样品七", "x" * 400, "<!--", "a\u2028b\u202ec", "&amp;",
]  # fmt: skip


def visible(text: str) -> str:
    """What a reader sees: without scripts, styles and tags."""
    bare = re.sub(r"<(script|style)\b.*?</\1>", "", text, flags=re.S)
    return html.unescape(re.sub(r"<[^>]*>", "", bare))


@pytest.mark.parametrize("name", HOSTILE)
def test_names_are_text(make_result, tmp_path: Path, name: str) -> None:
    result = make_result(name, points=60)
    phases = tuple(p.model_copy(update={"name": name}) for p in result.findings.phases)
    details = {name: name, "note": name}
    odd = result.model_copy(update={"details": details, "findings": result.findings.model_copy(update={"phases": phases})})
    path = write_sample_page(odd, tmp_path / "p", shared_script=True)
    assert path.parent == tmp_path / "p"
    text = path.read_text(encoding="utf-8")
    shown = "".join("" if c == "\u202e" else " " if c == "\u2028" else c for c in name)
    assert " ".join(shown.split())[:60].replace(" ", "") in visible(text).replace(" ", "")
    assert len(re.findall(r"<script", text)) == 3  # data and the two of the page
    assert len(re.findall(r"</script", text)) == 3
    assert "<img" not in text
    assert "alert(1)</script>" not in text
    write_overview(Campaign(title=name, rows=(CampaignRow(sample=name, failed=name), CampaignRow(sample=name))), tmp_path)
    overview = (tmp_path / "index.html").read_text(encoding="utf-8")
    assert len(re.findall(r"<script", overview)) == 1


def test_data_cannot_end_its_element() -> None:
    text = safe_json({"a": "</script><!--&\u2028"})
    assert not set(text) & set("<>&\u2028")
    assert json.loads(text) == {"a": "</script><!--&\u2028"}
    assert "</script" not in plotting_script()
    assert "<!--" not in plotting_script()


def test_only_own_scripts_and_style_may_act(full_result: SampleResult, tmp_path: Path) -> None:
    for shared in (False, True):
        text = write_sample_page(full_result, tmp_path / f"{shared}.html", shared_script=shared).read_text(encoding="utf-8")
        policy = html.unescape(re.search(r'http-equiv="Content-Security-Policy" content="([^"]*)"', text)[1])  # type: ignore[index]
        rules = dict(part.split(" ", 1) for part in policy.split("; "))
        assert rules["default-src"] == "'none'"
        assert rules["connect-src"] == "'none'"
        assert rules["img-src"] == "data:"
        assert "unsafe" not in rules["script-src"]
        scripts = re.findall(r"<script>(.*?)</script>", text, flags=re.S)
        assert len(scripts) == (2 if shared else 3)
        for script in scripts:
            # W3C Content Security Policy Level 3: base64 of the SHA-256 of the text of the element
            digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
            assert f"'sha256-{digest}'" in rules["script-src"]
        assert "http://" not in re.sub(r"<script>.*?</script>", "", text, flags=re.S)
        assert not re.search(r'\son\w+="|\sstyle="', re.sub(r"<script>.*?</script>", "", text, flags=re.S))


def test_every_part_is_there_or_said_to_be_empty(full_result: SampleResult, make_result, tmp_path: Path) -> None:
    text = visible(write_sample_page(full_result, tmp_path / "a.html").read_text(encoding="utf-8"))
    for part in (
        "swells", "about 18 % of its sheet silicates by weight (95 % interval 15 to 21 %)", "Talc cannot be excluded", "41.3",
        "38.3 – 44.5", "No indices were computed", "No chemical analysis was given", "Pyrophyllite", "quartz", "No warnings",
        "random powder from 58 to 64 degrees", "nothing at 14.3 angstrom collapses to 10", "file header", "screening result",
    ):  # fmt: skip
        assert part in text
    bare = visible(write_sample_page(make_result(curves=False), tmp_path / "b.html").read_text(encoding="utf-8"))
    assert "carries no curves" in bare
    filled = full_result.model_copy(update={
        "indices": (IndexValue(id="k", name="Width of the 10 line", value=0.31, unit="degree", weakness="needs calibration"),
                    IndexValue(id="e", name="Ratio 5/10", reason="no air-dried scan")),
        "chemistry": ChemistryCheck(agrees=False, text="too much potassium",
                                    oxides=(OxideMisfit(oxide="K2O", measured=5.1, implied=3.2),)),
        "findings": full_result.findings.model_copy(update={"next_measurements": (NextMeasurement(
            measurement="d(060) of a random powder", separates=("talc", "pyrophyllite"),
            outcomes=(Outcome(phase="talc", name="Talc", text="a line at 1.527", d_spacing=1.527, two_theta=60.6),)),)}),
        "proportions": full_result.proportions.model_copy(
            update={"warnings": (FitWarning(kind="residual", text="a hump is left"),)}),
    })  # fmt: skip
    text = visible(write_sample_page(filled, tmp_path / "c.html").read_text(encoding="utf-8"))
    for part in ("0.31", "needs calibration", "no air-dried scan", "does not agree", "too much potassium", "1.527", "a hump"):
        assert part in text


def test_unknown_is_neither_zero_nor_none(make_result, tmp_path: Path) -> None:
    result = make_result(points=60)
    bare = {"weight_percent": None, "low95": None, "high95": None, "detection_limit": None}
    phases = tuple(p.model_copy(update=bare) for p in result.proportions.phases)
    quality = type(result.proportions.quality)()
    odd = result.model_copy(update={"proportions": result.proportions.model_copy(update={"phases": phases, "quality": quality})})
    text = visible(write_sample_page(odd, tmp_path / "a.html").read_text(encoding="utf-8"))
    assert "None" not in text.replace("None:", "")
    assert "not weighed" in text


@pytest.mark.parametrize(("verdict", "start"), [
    ("yes", "The sample holds swelling layers"), ("no", "No swelling layers were found"),
    ("cannot tell", "These scans cannot tell"),
])  # fmt: skip
def test_verdict_is_two_sentences(make_result, verdict: str, start: str) -> None:
    first, second = verdict_sentences(make_result(verdict=verdict, curves=False))
    assert first.startswith(start)
    assert first.endswith(".")
    assert second == "It consists of Illite, Kaolinite, Smectite and Chlorite; Talc cannot be excluded."


def test_one_result_is_one_file_and_many_share_the_script(make_result, tmp_path: Path) -> None:
    (single,) = write_pages([make_result("only")], tmp_path / "one")
    assert sorted(p.name for p in (tmp_path / "one").iterdir()) == [single.name] == ["only.html"]
    many = write_pages([make_result(name) for name in ("A", "a", "index", "b/c", "#1 %x?")], tmp_path / "many")
    assert many[0].name == "index.html"
    assert len({p.name.casefold() for p in many}) == 6
    assert (tmp_path / "many" / "plotting.js").stat().st_size > 1_000_000
    assert all(p.stat().st_size < 500_000 for p in many)
    links = re.findall(r'<a href="(\./[^"]*)"', many[0].read_text(encoding="utf-8"))
    from urllib.parse import unquote

    assert [unquote(link[2:]) for link in links] == [p.name for p in many[1:]]


def test_large_scans_stay_below_the_limit(make_result, tmp_path: Path) -> None:
    result = make_result(points=6000)
    path = write_sample_page(result, tmp_path, shared_script=True)
    assert path.stat().st_size < 500_000
    assert "measured point is drawn; the result file has all" in visible(path.read_text(encoding="utf-8"))


def test_same_result_same_page(make_result, tmp_path: Path) -> None:
    pages = [write_sample_page(make_result(points=60), tmp_path / f"{k}.html").read_bytes() for k in range(2)]
    assert pages[0] == pages[1]


def test_overview_of_a_campaign(tmp_path: Path) -> None:
    (tmp_path / "f.svg").write_text('<svg xmlns="http://www.w3.org/2000/svg"/>')
    rows = (CampaignRow(sample="S1", page="S1.html", verdict="yes", expandable=20.0, low95=15.0, high95=25.0, cluster=1,
                        phases={"illite": 80.0, "smectite": 20.0}, groups={"true mica": 80.0, "smectite": 20.0}, flags=("hump",)),
            CampaignRow(sample="S2", failed="no scan can be read"))  # fmt: skip
    repeat = Repeat(label="standard A", phase="illite", samples=4, mean=50.25, deviation=1.5, typical_error=2.0)
    campaign = Campaign(title="Dam", rows=rows, repeats=(repeat,), figures={"trend": "f.svg"})
    text = write_overview(campaign, tmp_path).read_text(encoding="utf-8")
    for part in ("S1", "swells", "15.0 – 25.0", "hump", "no scan can be read", "standard A", "trend", "1 failed"):
        assert part in visible(text) or part in text
    assert "data:image/svg+xml;base64," in text
    with pytest.raises(XrdmicaError, match="figure cannot be read"):
        write_overview(replace(campaign, figures={"x": "none.svg"}), tmp_path)


# ---------------------------------------------------------------- contrast


def _luminance(colour: str) -> float:
    full = colour if len(colour) == 7 else "#" + "".join(2 * c for c in colour[1:])
    channels = [int(full[k : k + 2], 16) / 255 for k in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(one: str, other: str) -> float:
    """Contrast ratio of WCAG 2.1 (W3C), definition under 1.4.3."""
    low, high = sorted((_luminance(one), _luminance(other)))
    return (high + 0.05) / (low + 0.05)


def test_contrast_of_text_and_lines() -> None:
    assert contrast("#000000", "#ffffff") == pytest.approx(21)
    css = asset("page.css")
    texts = re.findall(r":root(?:\[data-theme=dark\])?\s*\{([^}]*)\}", css)
    blocks = [dict(re.findall(r"--([\w]+):\s*(#[0-9a-f]{3,6})", text)) for text in texts]
    light = {**blocks[0], **next(b for b in blocks if b.get("g1") == "#1d4f91" and "paper" not in b)}
    dark = {**next(b for b in blocks if b.get("paper") == "#14181b"), **next(b for b in blocks if b.get("g1") == "#7fb0f5")}
    for theme in (light, dark):
        for text in ("ink", "soft", "accent", "yes", "no", "open"):
            for ground in ("paper", "sheet", "wash"):
                assert contrast(theme[text], theme[ground]) >= 4.5, (text, ground)  # WCAG 2.1, 1.4.3 level AA
    for k in range(1, 13):
        assert contrast(dark[f"g{k}"], dark["sheet"]) >= 3, k  # WCAG 2.1, 1.4.11: graphics
        if k not in (2, 8):  # these two also differ by place and line; they are drawn beside names and numbers
            assert contrast(light[f"g{k}"], light["sheet"]) >= 3, k
