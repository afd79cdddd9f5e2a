"""The figure of a sample: every scan with its calculated curve, the phases under it and the reflections named."""

from __future__ import annotations

import io
import warnings
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from xrdmica.errors import XrdmicaError
from xrdmica.report.figure_panels import CALCULATED, FAINT, INK, draw_difference, draw_scan, draw_spacings
from xrdmica.report.files import write_bytes
from xrdmica.report.styles import GROUP_COLOURS, PhaseStyle, angle_label, fonts, one_line, phase_styles, tube_of
from xrdmica.results import SampleResult

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["GROUP_COLOURS", "PhaseStyle", "figure_bytes", "phase_styles", "sample_figure", "save_figure"]

_WIDTH, _LEFT, _RIGHT = 11.0, 0.85, 0.2  # inches
_RESIDUAL, _GAP = 0.38, 0.14  # inches


def sample_figure(result: SampleResult) -> Figure:
    """Draw all scans of a sample.

    One panel per scan with the observed points, the calculated curve, the background, each phase on top of the
    background, the reflections named, and a strip with the difference. Intensity is on a square-root scale, where
    counting noise is equally wide everywhere; the difference strip uses the same scale.

    Parameters
    ----------
    result : SampleResult
        Finished sample with curves.

    Returns
    -------
    matplotlib.figure.Figure
        A figure that belongs to no window, so that it may be made in a worker process.

    Raises
    ------
    XrdmicaError
        If the result carries no curves.
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    if not result.curves:
        raise XrdmicaError(f"sample {result.sample}: the result carries no curves", fix="run it again with curves on")
    scans = {scan.label: scan for scan in result.scans}
    styles = phase_styles(result)
    tubes = [tube_of(scans.get(curve.scan)) for curve in result.curves]
    shared = len({tube.mean_wavelength if tube else None for tube in tubes}) == 1
    legend_rows = -(-(len(styles) + 3) // 3)
    top = 0.42 + 0.16 * legend_rows + 0.55
    tall = {1: 3.6, 2: 2.8}.get(len(result.curves), 2.15)
    each = tall + _RESIDUAL + _GAP + (0.0 if shared else 0.72)
    height = top + each * len(result.curves) + (0.36 if shared else -0.1)
    figure = Figure(figsize=(_WIDTH, height), facecolor="white")
    FigureCanvasAgg(figure)
    width = (_WIDTH - _LEFT - _RIGHT) / _WIDTH
    limits = (min(c.two_theta[0] for c in result.curves), max(c.two_theta[-1] for c in result.curves))
    panels: list[Axes] = []
    for k, (curve, tube) in enumerate(zip(result.curves, tubes, strict=True)):
        upper = height - top - k * each
        panel = figure.add_axes((_LEFT / _WIDTH, (upper - tall) / height, width, tall / height))
        strip = figure.add_axes((_LEFT / _WIDTH, (upper - tall - _RESIDUAL) / height, width, _RESIDUAL / height))
        for axes in (panel, strip):
            for spine in axes.spines.values():
                spine.set(linewidth=0.6, color=INK)
            axes.set_xlim(*(limits if shared else (curve.two_theta[0], curve.two_theta[-1])))
        draw_scan(panel, curve, styles, scan=scans.get(curve.scan))
        draw_difference(strip, curve)
        last = k == len(result.curves) - 1
        if last or not shared:
            strip.set_xlabel(angle_label(tube), fontsize=9, parse_math=False)
        strip.tick_params(labelbottom=last or not shared)
        if tube is not None and (k == 0 or not shared):
            draw_spacings(panel, tube)
        panels.append(panel)
    figure.text(_LEFT / _WIDTH, 1 - 0.28 / height, one_line(result.sample), fontsize=13, weight="bold", va="center",
                parse_math=False, family=list(fonts()), gid="title")  # fmt: skip
    figure.text(1 - _RIGHT / _WIDTH, 1 - 0.28 / height, f"100 % = {result.proportions.basis}", fontsize=8, ha="right",
                va="center", color=FAINT, parse_math=False)  # fmt: skip
    _legend(figure, panels[0], list(styles.values()), 1 - 0.42 / height)
    return figure


def _legend(figure: Figure, panel: Axes, styles: Sequence[PhaseStyle], top: float) -> None:
    from matplotlib.lines import Line2D

    handles = [
        Line2D([], [], color=INK, lw=0.8, label="observed"),
        Line2D([], [], color=CALCULATED, lw=1.8, label="calculated", alpha=0.7),
        Line2D([], [], color=FAINT, lw=1, ls=(0, (4, 2)), label="background"),
    ]
    handles += [Line2D([], [], color=s.colour, ls=s.line, lw=1.8, label=s.legend) for s in styles]
    legend = figure.legend(
        handles=handles, loc="upper left", bbox_to_anchor=(_LEFT / _WIDTH - 0.005, top), ncol=3, frameon=False,
        handlelength=2.6, columnspacing=2.2, borderaxespad=0.2, labelspacing=0.35,
        prop={"family": list(fonts()), "size": 8},
    )  # fmt: skip
    for text in legend.get_texts():
        text.set_parse_math(False)


def figure_bytes(figure: Figure, kind: str, *, dpi: int = 140) -> bytes:
    """The figure as a file of the given kind (``png``, ``svg`` or ``pdf``); the same figure gives the same bytes."""
    import matplotlib as mpl

    undated: dict[str, dict[str, Any]] = {"png": {"Software": None}, "svg": {"Date": None}, "pdf": {"CreationDate": None}}
    buffer = io.BytesIO()
    with warnings.catch_warnings(), mpl.rc_context({"svg.hashsalt": "xrdmica"}):
        # a script that no installed font has is drawn as boxes; the name stands in full in the result file
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        figure.savefig(buffer, format=kind, dpi=dpi, metadata=undated[kind])
    return buffer.getvalue()


def save_figure(figure: Figure, path: Path) -> Path:
    """Write a figure, whole or not at all; the suffix says how.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
        From `sample_figure`.
    path : pathlib.Path
        Target ending in ``.png``, ``.svg`` or ``.pdf``.

    Returns
    -------
    pathlib.Path
        The target.

    Raises
    ------
    XrdmicaError
        If the suffix is another one or the file cannot be written.
    """
    path = Path(path)
    kind = path.suffix.lower().removeprefix(".")
    if kind not in ("png", "svg", "pdf"):
        raise XrdmicaError(f"{path}: figures cannot be written as {path.suffix or 'a file without suffix'}",
                           fix="end the name in .png, .svg or .pdf")  # fmt: skip
    return write_bytes(path, figure_bytes(figure, kind))
