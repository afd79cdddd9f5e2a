"""What many samples come to: tables, flags, groups of similar samples, repeatability, figures."""

from __future__ import annotations

import csv
import io
import json
import sys
import xml.etree.ElementTree as ElementTree
from pathlib import Path
from statistics import mean, stdev

import numpy as np
import pytest
from scipy.spatial.distance import jensenshannon

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "helpers"))

from fake_batch import FakeEntry, with_weights
from fake_quick import QuickSettings, quick
from finished_sample import build_result

from xrdmica.batch.campaign import INDICES_HEADER, campaign_of, indices_rows, quality_flags
from xrdmica.batch.repeats import RepeatCollector
from xrdmica.batch.run import run_batch
from xrdmica.batch.sheet import read_sheet
from xrdmica.batch.similar import _points, _silhouette, group_similar
from xrdmica.report.campaign import Campaign, CampaignRow
from xrdmica.report.campaign_figures import CORNERS, campaign_figures, stacked_figure, ternary_figure
from xrdmica.results import IndexValue, SampleResult


def sample(name: str, weights: list[float], **details: str) -> SampleResult:
    return with_weights(name, weights, False, details)


def table(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8-sig", newline="") as stream:
        return list(csv.DictReader(stream))


def go(names: list[FakeEntry], out: Path, **options: object) -> None:
    options = {"settings": QuickSettings(), "analyse": quick, "figures": False} | options
    list(run_batch(names, out, **options))


# ---------------------------------------------------------------- tables


def test_wide_table_agrees_with_the_long_one(tmp_path: Path) -> None:
    go([FakeEntry("S2"), FakeEntry("bad"), FakeEntry("S1")], tmp_path)
    wide = table(tmp_path / "proportions_wide.csv")
    assert [row["sample"] for row in wide] == ["S2", "S1"]
    long = table(tmp_path / "proportions.csv")
    for row in wide:
        weights = {r["name"]: r["weight_percent"] for r in long if r["sample"] == row["sample"] and r["weight_percent"]}
        assert {name: row[name] for name in weights} == weights
        assert sum(map(float, weights.values())) == pytest.approx(100, abs=0.05)
        assert row["swelling"] == "yes"


def test_indices_table() -> None:
    values = (
        IndexValue(id="kubler", name="width", value=0.42, standard_error=0.02, unit="degree", scan="air_dried"),
        IndexValue(id="biscaye", name="valley", reason="no valley"),
    )
    rows = indices_rows(build_result("S1").model_copy(update={"indices": values}))
    assert INDICES_HEADER == ("sample", "index", "name", "value", "standard_error", "unit", "scan", "reason")
    assert rows == [
        ("S1", "kubler", "width", 0.42, 0.02, "degree", "air_dried", ""),
        ("S1", "biscaye", "valley", None, None, "", "", "no valley"),
    ]


def test_tables_for_spreadsheets(tmp_path: Path) -> None:
    """Cells that spreadsheets would compute get an apostrophe (advice of the Open Worldwide Application Security Project on
    formula injection: a leading equals, plus, minus, at sign, tab or carriage return); numbers stay numbers."""
    names = ["=1+1", "+1 a", "-1 a", "@SUM", "عينة", "a;b,c\"d"]
    go([FakeEntry(name) for name in names], tmp_path, bom=True)
    for path in tmp_path.glob("*.csv"):
        assert path.read_bytes().startswith(b"\xef\xbb\xbf"), path.name
        for row in csv.reader(io.StringIO(path.read_text(encoding="utf-8-sig"))):
            for cell in row:
                assert cell[:1] not in ("=", "+", "@", "\t", "\r"), cell
                assert cell[:1] != "-" or float(cell) < 0, cell
    written = [row["sample"] for row in table(tmp_path / "summary.csv")]
    assert written == ["'=1+1", "'+1 a", "'-1 a", "'@SUM", "عينة", "a;b,c\"d"]
    go([FakeEntry(name) for name in names], tmp_path)
    assert not (tmp_path / "summary.csv").read_bytes().startswith(b"\xef")


def test_flags() -> None:
    result = build_result("S1")
    assert quality_flags(result) == ("phases open", "1 unassigned lines")
    worse = build_result("S1", verdict="cannot tell", origin="assumed")
    quality = worse.proportions.quality.model_copy(update={"reduced_chi_square": 9.0, "converged": False})
    worse = worse.model_copy(update={"proportions": worse.proportions.model_copy(update={"quality": quality})})
    assert {"poor fit", "fit not converged", "swelling open", "radiation assumed"} <= set(quality_flags(worse))
    dry = result.model_copy(update={"scans": result.scans[:1]})
    assert "no glycol scan" in quality_flags(dry)


def test_nothing_finished(tmp_path: Path) -> None:
    go([FakeEntry("bad")], tmp_path, figures=True)
    assert table(tmp_path / "proportions_wide.csv") == []
    assert {p.name for p in tmp_path.iterdir()} == {
        "failures.csv", "groups.csv", "indices.csv", "proportions.csv", "proportions_wide.csv", "run.json", "summary.csv",
    }  # fmt: skip
    assert json.loads((tmp_path / "run.json").read_text())["samples"][0]["status"] == "failed"


def test_figures_that_fail_leave_the_tables(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def fails(campaign: Campaign) -> None:
        raise RuntimeError("no paper")

    monkeypatch.setattr("xrdmica.batch.campaign.campaign_figures", fails)
    monkeypatch.setitem(sys.modules, "xrdmica.report.page", None)
    go([FakeEntry("S1")], tmp_path, figures=True, report=True)
    assert (tmp_path / "run.json").exists()
    reasons = {row["sample"]: row["reason"] for row in table(tmp_path / "failures.csv")}
    assert "its page could not be written" in reasons["S1"]
    assert "the overview could not be written" in reasons["(all samples)"]
    assert [row["reason"] for row in table(tmp_path / "failures.csv")][1].endswith("could not be drawn: no paper")


# ---------------------------------------------------------------- groups of similar samples


def mixtures(count: int, centre: list[float], rng: np.random.Generator, width: float = 400.0) -> list[dict[str, float]]:
    return [dict(zip("abcd", 100 * row, strict=True)) for row in rng.dirichlet(np.array(centre) * width, count)]


def test_groups_are_found_again() -> None:
    """Samples drawn around three compositions; the labels are those that went in, the largest group first."""
    rng = np.random.default_rng(1)
    middles = {30: [0.6, 0.2, 0.1, 0.1], 20: [0.1, 0.1, 0.7, 0.1], 10: [0.2, 0.1, 0.1, 0.6]}
    grouping = group_similar([m for count, middle in middles.items() for m in mixtures(count, middle, rng)])
    assert grouping.groups == (1,) * 30 + (2,) * 20 + (3,) * 10
    assert not any(grouping.apart)
    assert grouping.silhouette is not None
    assert grouping.silhouette > 0.7


def test_one_cloud_is_one_group() -> None:
    grouping = group_similar(mixtures(40, [0.4, 0.3, 0.2, 0.1], np.random.default_rng(2)))
    assert set(grouping.groups) == {1}
    assert grouping.silhouette is None


def test_a_sample_unlike_the_others_is_flagged() -> None:
    rng = np.random.default_rng(3)
    usual = mixtures(25, [0.5, 0.3, 0.2, 0.01], rng)
    odd = {"a": 5.0, "d": 95.0}
    assert group_similar([*usual, odd]).apart == (False,) * 25 + (True,)
    near = group_similar([*usual, {"a": 25.0, "b": 30.0, "c": 45.0}])
    assert near.apart[-1]
    assert sum(near.apart) == 1


def test_samples_without_proportions_belong_nowhere() -> None:
    assert group_similar([]).groups == ()
    assert group_similar([{"a": 100.0}, {}, {"b": 100.0}]).groups == (1, None, 1)
    assert group_similar([{"a": 100.0}] * 6).groups == (1,) * 6


def test_order_of_the_sheet_does_not_matter() -> None:
    rng = np.random.default_rng(4)
    many = [*mixtures(12, [0.6, 0.2, 0.1, 0.1], rng), *mixtures(20, [0.1, 0.1, 0.7, 0.1], rng)]
    order = rng.permutation(len(many))
    straight, mixed = group_similar(many).groups, group_similar([many[k] for k in order]).groups
    assert [straight[k] for k in order] == list(mixed)


def test_distance_against_a_general_library() -> None:
    """Hellinger distance by its definition, sqrt(1 - sum sqrt(p q)), and its bounds by the Jensen-Shannon distance of scipy
    (half the squared Hellinger distance to twice it, after J. Lin 1991 and common inequalities, from memory)."""
    one, two = {"a": 70.0, "b": 20.0, "c": 10.0}, {"a": 10.0, "b": 30.0, "d": 60.0}
    points = _points([one, two])
    ours = float(np.linalg.norm(points[0] - points[1]))
    p, q = np.array([0.7, 0.2, 0.1, 0]), np.array([0.1, 0.3, 0, 0.6])
    assert ours == pytest.approx(np.sqrt(1 - np.sqrt(p * q).sum()))
    assert 0.5 * ours**2 <= jensenshannon(p, q) ** 2 <= 2 * ours**2


def test_silhouette_by_its_definition() -> None:
    """Written out sample by sample after Rousseeuw 1987."""
    rng = np.random.default_rng(5)
    points = rng.normal(size=(15, 3))
    labels = np.array([1] * 6 + [2] * 8 + [3])
    square = np.linalg.norm(points[:, None] - points[None], axis=2)
    values = []
    for k, own in enumerate(labels):
        inside = [square[k, j] for j in range(15) if labels[j] == own and j != k]
        if not inside:
            values.append(0.0)
            continue
        a = mean(inside)
        b = min(mean(square[k, labels == other]) for other in {1, 2, 3} - {own})
        values.append((b - a) / max(a, b))
    assert _silhouette(square, labels) == pytest.approx(mean(values))


def test_many_samples_need_no_table_of_all_distances(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("xrdmica.batch.similar.LARGEST", 60)
    rng = np.random.default_rng(6)
    grouping = group_similar([*mixtures(300, [0.6, 0.2, 0.1, 0.1], rng), *mixtures(200, [0.1, 0.1, 0.7, 0.1], rng)])
    assert grouping.groups == (1,) * 300 + (2,) * 200


# ---------------------------------------------------------------- repeats


def test_repeatability(tmp_path: Path) -> None:
    """Mean and standard deviation against the statistics module of Python."""
    rows = [
        FakeEntry("S1"), FakeEntry("S1 again", (), {"repeat_of": "S1"}), FakeEntry("S2"),
        FakeEntry("std a", (), {"standard_sample": "mix 7"}), FakeEntry("std b", (), {"standard_sample": "mix 7"}),
        FakeEntry("std c", (), {"standard_sample": "mix 7"}),
    ]  # fmt: skip
    go(rows, tmp_path)
    written = table(tmp_path / "repeats.csv")
    assert list(dict.fromkeys((row["set"], row["samples"]) for row in written)) == [("S1", "2"), ("mix 7", "3")]
    weights = {row["sample"]: row for row in table(tmp_path / "proportions_wide.csv")}
    for row in written:
        members = ["S1", "S1 again"] if row["set"] == "S1" else ["std a", "std b", "std c"]
        values = [float(weights[member][row["phase"]]) for member in members]
        assert float(row["mean"]) == pytest.approx(mean(values), abs=0.011)
        assert float(row["standard_deviation"]) == pytest.approx(stdev(values), abs=0.02)
        assert float(row["typical_standard_error"]) == 1.5
    go(rows[2:3], tmp_path)
    assert not (tmp_path / "repeats.csv").exists()


def test_marks_come_from_the_sheet(tmp_path: Path) -> None:
    for name in "abc":
        (tmp_path / f"{name}.xy").write_text("".join(f"{3 + 0.1 * k:.1f} {100 + k % 7}\n" for k in range(200)))
    sheet = tmp_path / "sheet.csv"
    sheet.write_text("sample,file,repeat_of,standard_sample\na,a.xy,,\nb,b.xy,a,\nc,c.xy,,mix 7\n")
    details = [dict(entry.details) for entry in read_sheet(sheet)]
    assert details == [{}, {"repeat_of": "a"}, {"standard_sample": "mix 7"}]
    assert RepeatCollector.originals_of(details) == {"a"}


def test_a_phase_found_once_has_no_repeatability() -> None:
    collector = RepeatCollector()
    collector.add(sample("a", [60.0, 40.0], standard_sample="m"))
    collector.add(sample("b", [100.0], standard_sample="m"))
    (only,) = collector.repeats()
    assert (only.phase, only.samples, only.mean) == ("Illite", 2, 80.0)


# ---------------------------------------------------------------- figures


def campaign(count: int) -> Campaign:
    rng = np.random.default_rng(7)
    return campaign_of(sample(f"S{k}", (100 * rng.dirichlet([4, 3, 2, 1])).tolist()) for k in range(count))


def test_stacked_bars_hold_the_numbers() -> None:
    made = campaign(5)
    figure, caption = stacked_figure(made)
    (axes,) = figure.axes
    assert "one bar per sample" in caption
    assert [label.get_text() for label in axes.get_xticklabels()] == [f"S{k}" for k in range(5)]
    for bars in axes.containers:
        for row, bar in zip(made.rows, bars, strict=True):
            assert bar.get_height() == pytest.approx(row.phases[bars.get_label()])
    assert {bars.get_label() for bars in axes.containers} == set(made.rows[0].phases)


def test_very_many_samples_are_drawn_as_groups() -> None:
    figure, caption = stacked_figure(campaign(301))
    assert "groups of similar samples among 301" in caption
    assert len(figure.axes[0].containers[0]) <= 8


def test_corners_of_the_triangle() -> None:
    """A sample of one kind only stands in its corner, one of equal parts in the middle of the triangle."""
    groups = [sorted(names)[0] for _, names in CORNERS]
    pure = [CampaignRow(g, groups={g: 80.0}, phases={g: 80.0}) for g in groups]
    even = CampaignRow("even", groups=dict.fromkeys(groups, 20.0), phases={"x": 60.0})
    little = CampaignRow("little", groups={groups[0]: 10.0}, phases={"quartz": 90.0})
    figure, caption = ternary_figure(Campaign("c", (*pure, even, little)))
    points = figure.axes[0].collections[0].get_offsets()
    height = np.sqrt(3) / 2
    np.testing.assert_allclose(points, [(0.5, height), (0, 0), (1, 0), (0.5, height / 3)], atol=1e-12)
    assert "1 samples with less than 20 wt % of them left out" in caption


def test_figures_are_svg_and_the_same_each_time() -> None:
    first, second = campaign_figures(campaign(30)), campaign_figures(campaign(30))
    assert set(first) == {"proportions.svg", "ternary.svg"}
    assert first == second
    for _, content in first.values():
        assert ElementTree.fromstring(content).tag.endswith("svg")
        assert b"<dc:date>" not in content
    assert campaign_figures(Campaign("c", (CampaignRow("bad", failed="no"),))) == {}


def test_odd_names_in_figures() -> None:
    names = ("$\\frac{1", "<b>&", "عينة", "_x")
    rows = [CampaignRow(name, phases={"$x_{y}$": 100.0}, groups={"kaolin": 100.0}) for name in names]
    for _, content in campaign_figures(Campaign("c", tuple(rows))).values():
        ElementTree.fromstring(content)
