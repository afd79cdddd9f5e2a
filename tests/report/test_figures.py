"""The figure, looked at as data."""

from __future__ import annotations

import warnings
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from xrdmica.errors import XrdmicaError
from xrdmica.radiation import Radiation
from xrdmica.report.figures import GROUP_COLOURS, figure_bytes, phase_styles, sample_figure, save_figure
from xrdmica.results import SampleResult


def by_gid(axes: Any, gid: str) -> list[Any]:
    return [artist for artist in axes.get_children() if artist.get_gid() == gid]


def panels(figure: Any) -> list[Any]:
    return [axes for axes in figure.axes if by_gid(axes, "observed")]


@pytest.fixture(scope="module")
def figure(full_result: SampleResult) -> Any:
    return sample_figure(full_result)


def test_every_scan_has_its_curves(figure: Any, full_result: SampleResult) -> None:
    assert len(panels(figure)) == len(full_result.curves) == 4
    for axes, curve in zip(panels(figure), full_result.curves, strict=True):
        for gid, expected in (("observed", curve.observed), ("calculated", curve.calculated), ("background", curve.background)):
            (line,) = by_gid(axes, gid)
            np.testing.assert_array_equal(line.get_xdata(), curve.two_theta)
            np.testing.assert_array_equal(line.get_ydata(), expected)
        for phase in curve.contributions:
            (line,) = by_gid(axes, f"phase:{phase}")
            drawn = np.isfinite(line.get_ydata())
            above = np.array(curve.contributions[phase])[drawn] + np.array(curve.background)[drawn]
            np.testing.assert_allclose(line.get_ydata()[drawn], above)
        assert axes.get_xlim() == (curve.two_theta[0], curve.two_theta[-1])


def test_intensity_axis_is_square_root(figure: Any) -> None:
    axes = panels(figure)[0]
    heights = axes.transScale.transform([(10, 0), (10, 100), (10, 400), (10, 900)])[:, 1]
    np.testing.assert_allclose(np.diff(heights), 10.0)


def test_difference_strip_has_the_width_of_counting_noise(figure: Any) -> None:
    # square roots of Poisson counts have standard deviation 1/2 (Bartlett 1936); the fixture draws such counts
    strips = [axes for axes in figure.axes if by_gid(axes, "difference")]
    assert len(strips) == 4
    for axes in strips:
        assert np.std(by_gid(axes, "difference")[0].get_ydata()) == pytest.approx(0.5, abs=0.05)


def test_names_over_lines(figure: Any, full_result: SampleResult) -> None:
    air = [text.get_text() for text in by_gid(panels(figure)[0], "mark")]
    assert {"Ilt 001", "Ilt 002", "Ilt 003"} <= set(air)
    assert len(air) == len(set(air))
    heated = [text.get_text() for text in by_gid(panels(figure)[3], "mark")]
    kaolinite = phase_styles(full_result)["kaolinite"].symbol
    assert not [text for text in heated if text.startswith(kaolinite)]


def test_names_do_not_cover_each_other(figure: Any) -> None:
    figure.canvas.draw()
    for axes in panels(figure):
        boxes = [text.get_window_extent() for text in by_gid(axes, "mark")]
        assert len(boxes) > 8
        frame = axes.get_window_extent()
        for k, box in enumerate(boxes):
            assert box.y1 <= frame.y1 + 1
            for other in boxes[k + 1 :]:
                wide = min(box.x1, other.x1) - max(box.x0, other.x0)
                high = min(box.y1, other.y1) - max(box.y0, other.y0)
                assert wide < 2 or high < 2


def test_ticks_stand_at_the_marks(figure: Any, full_result: SampleResult) -> None:
    for axes, curve in zip(panels(figure), full_result.curves, strict=True):
        for phase in curve.contributions:
            (ticks,) = by_gid(axes, f"ticks:{phase}")
            at = sorted(segment[0][0] for segment in ticks.get_segments())
            assert at == pytest.approx(sorted(m.two_theta for m in curve.marks if m.phase == phase))


def test_spacing_axis_obeys_bragg(figure: Any) -> None:
    top = next(child for child in panels(figure)[0].child_axes if child.get_gid() == "spacing")
    shown = dict(zip([t.get_text() for t in top.get_xticklabels()], top.get_xticks(), strict=True))
    assert {"20", "15", "10", "7", "5", "4", "3.5", "3", "2.5"} <= set(shown)
    # 10 angstrom with Cu K-alpha (mean 1.5418): 2 asin(1.5418 / 20) = 8.84 degrees, worked out by hand
    assert shown["10"] == pytest.approx(8.84, abs=0.01)


def test_tubes_that_differ_get_axes_of_their_own(make_result) -> None:
    result = make_result(radiations=("Cu", "Co", "Cu", "Cu"), origin="assumed", points=300)
    figure = sample_figure(result)
    tops = [child for axes in panels(figure) for child in axes.child_axes if child.get_gid() == "spacing"]
    assert len(tops) == 4
    at = [dict(zip([t.get_text() for t in top.get_xticklabels()], top.get_xticks(), strict=True))["10"] for top in tops]
    assert at[1] == pytest.approx(float(Radiation.tube("Co").two_theta(10.0)))
    assert at[1] > at[0] + 1
    labels = [axes.get_xlabel() for axes in figure.axes if axes.get_xlabel()]
    assert labels == ["2θ (degree), Cu Kα", "2θ (degree), Co Kα", "2θ (degree), Cu Kα", "2θ (degree), Cu Kα"]
    assert "(assumed)" in by_gid(panels(figure)[0], "scan")[0].get_text()


ODD_NAMES = ["a$b_^c", "$x_y$", "$\\frac$", "<script>", "=cmd()", "a/b", "x" * 400, "样品", "عينة", "a\nb\x1b[31m", ""]


@pytest.mark.parametrize("name", ODD_NAMES)
def test_odd_names_are_text_and_nothing_else(make_result, tmp_path: Path, name: str) -> None:
    result = make_result(name, points=80)
    result = result.model_copy(update={"curves": result.curves[:1]})
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        figure = sample_figure(result)
        path = save_figure(figure, tmp_path / "f.png")
    title = next(text for text in figure.texts if text.get_gid() == "title")
    assert title.get_parse_math() is False
    assert title.get_text().isprintable()
    if len(name) < 80 and name.isprintable():
        assert title.get_text() == name
    assert path.read_bytes().startswith(b"\x89PNG\r\n\x1a\n")


def test_dollar_in_phase_names(make_result, tmp_path: Path) -> None:
    result = make_result(points=80)
    phases = tuple(p.model_copy(update={"name": "$\\bad$"}) if p.phase == "smectite" else p for p in result.proportions.phases)
    odd = result.model_copy(update={"proportions": result.proportions.model_copy(update={"phases": phases})})
    figure = sample_figure(odd)
    save_figure(figure, tmp_path / "f.png")
    assert any("$\\bad$" in text.get_text() for text in figure.legends[0].get_texts())


def test_legend_has_weights(figure: Any) -> None:
    texts = [text.get_text() for text in figure.legends[0].get_texts()]
    assert texts[:3] == ["observed", "calculated", "background"]
    assert texts[3].startswith("Illite")
    assert "41.3 %" in texts[3]
    assert texts[-1].endswith("possible")


def test_curves_may_be_observed_only(make_result, tmp_path: Path) -> None:
    result = make_result(points=80)
    bare = tuple(
        c.model_copy(update={"calculated": (), "background": (), "contributions": {}, "marks": ()}) for c in result.curves
    )
    save_figure(sample_figure(result.model_copy(update={"curves": bare})), tmp_path / "f.svg")
    assert (tmp_path / "f.svg").read_text().lstrip().startswith("<?xml")


def test_flat_and_empty_counts_draw(make_result, tmp_path: Path) -> None:
    result = make_result(points=80)
    zero = (0.0,) * 80
    flat = result.curves[0].model_copy(update={"observed": zero, "calculated": zero, "background": zero, "contributions": {}})
    save_figure(sample_figure(result.model_copy(update={"curves": (flat,)})), tmp_path / "f.pdf")
    assert (tmp_path / "f.pdf").read_bytes().startswith(b"%PDF")


def test_no_curves_and_unknown_suffix_are_told(make_result, full_result: SampleResult, tmp_path: Path) -> None:
    with pytest.raises(XrdmicaError, match="no curves"):
        sample_figure(make_result(curves=False))
    with pytest.raises(XrdmicaError, match=r"\.png, \.svg or \.pdf"):
        save_figure(sample_figure(full_result), tmp_path / "f.bmp")


def test_same_figure_same_bytes(make_result) -> None:
    result = make_result(points=80)
    result = result.model_copy(update={"curves": result.curves[:1]})
    for kind in ("png", "svg", "pdf"):
        assert figure_bytes(sample_figure(result), kind) == figure_bytes(sample_figure(result), kind)


def _lightness(colour: str) -> float:
    """CIE 1976 lightness L* of an sRGB colour (IEC 61966-2-1 and CIE 15)."""
    channels = [int(colour[k : k + 2], 16) / 255 for k in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    y = 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]
    return 116 * y ** (1 / 3) - 16 if y > 0.008856 else 903.3 * y


def test_colours_stand_out_on_white() -> None:
    # WCAG 2.1, 1.4.11: graphics need a contrast of 3:1, which on white is L* below about 61.7; a fill may be lighter
    assert len(set(GROUP_COLOURS.values())) == len(GROUP_COLOURS)
    assert all(_lightness(colour) < 66 for colour in GROUP_COLOURS.values())


def test_members_of_a_group_differ_by_line(make_result) -> None:
    result = make_result(points=80)
    curve = result.curves[0]
    more = curve.model_copy(update={"contributions": {**curve.contributions, "muscovite": curve.contributions["illite"]}})
    extra = result.proportions.phases[0].model_copy(update={"phase": "muscovite", "name": "Muscovite"})
    both = result.proportions.model_copy(update={"phases": (*result.proportions.phases, extra)})
    styles = phase_styles(result.model_copy(update={"curves": (more,), "proportions": both}))
    assert styles["illite"].colour == styles["muscovite"].colour
    assert styles["illite"].line != styles["muscovite"].line


def test_axes_go_in_and_come_out(full_result: SampleResult) -> None:
    from matplotlib.figure import Figure

    from xrdmica.report.figure_panels import draw_difference, draw_scan, draw_spacings

    figure = Figure()
    upper, lower = figure.subplots(2)
    upper.set_xlim(3, 35)
    curve = full_result.curves[0]
    assert draw_scan(upper, curve, phase_styles(full_result)) is upper
    assert draw_spacings(upper, Radiation.tube("Cu")) is upper
    assert draw_difference(lower, curve) is lower
    assert upper.get_xlim() == (3, 35)
    assert by_gid(lower, "difference")


def test_papers_get_vectors_and_few_type_sizes(figure: Any) -> None:
    for kind, sign in (("pdf", b"/Subtype /Image"), ("svg", b"<image")):
        assert sign not in figure_bytes(figure, kind)
    sizes = {text.get_fontsize() for axes in figure.axes for text in axes.texts if text.get_gid() == "mark"}
    assert sizes == {7.0}
