"""The figure of a record: a strip with its marks, the median beat, the trend."""

from __future__ import annotations

from typing import TYPE_CHECKING

from caval.report import _ink
from caval.report._beat import draw_beat, draw_readings
from caval.report._strip import SEEN_ON_ECG, choose_strip, draw_strip
from caval.report._trend import draw_trend
from caval.vocabulary import WAVES

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from caval.result import Result

__all__ = ["FOOTER", "figure"]

FOOTER = "Research software, not a medical device. Describes a recording; defers to local protocols and licensed practice."
_HEIGHT = {"ecg": 1.0, "cvp": 2.6, "abp": 1.2}
_LEGEND = (("clear", "clear"), ("weak", "weak"), ("fused", "fused with a neighbour"))


def figure(result: Result) -> Figure:
    """Draw a record on one page.

    Top left, some seconds of ECG, CVP and ABP with the marks; right, the median beat with quartiles and the numbers; below, the
    trend of the readings over the whole record. Shaded stretches carry no marks; the word in them says why. Signals are read only for
    the strip and for at most 200 beats.

    Parameters
    ----------
    result : Result
        Marks, pressures in mmHg and times in seconds of the record. A result without marks is drawn too, and says why.

    Returns
    -------
    matplotlib.figure.Figure
        14 by 10 inches at 100 dpi, on an Agg canvas of its own: no window, no global state.
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    drawn = Figure(figsize=(14, 10), dpi=100, facecolor="white")
    FigureCanvasAgg(drawn)
    strip_axes, beat_axes, readings_axis, trend_axis = _lay_out(drawn, [r for r in _HEIGHT if r in result.roles])
    strip = choose_strip(result)
    draw_strip(strip_axes, result, strip)
    draw_beat(beat_axes, result)
    draw_readings(readings_axis, result)
    draw_trend(trend_axis, result, strip)
    _write_title(drawn, result)
    _write_legend(next(iter(strip_axes.values())), result, strip)
    drawn.text(0.05, 0.012, FOOTER, fontsize=_ink.MARGIN_NOTE, color=_ink.SOFT, ha="left", va="bottom")
    version = f"caval {result.run.get('version', '')}".strip()
    drawn.text(0.985, 0.012, version, fontsize=_ink.MARGIN_NOTE, color=_ink.SOFT, ha="right", va="bottom")
    return drawn


def _lay_out(drawn: Figure, roles: list[str]) -> tuple[dict[str, Axes], dict[str, Axes], Axes, Axes]:
    """Axes of the strip by role, of the median beat by role, of the numbers, and of the trend."""
    rows = drawn.add_gridspec(2, 1, height_ratios=[2.55, 1.0], left=0.06, right=0.955, top=0.875, bottom=0.075, hspace=0.24)
    columns = rows[0].subgridspec(1, 2, width_ratios=[2.45, 1.0], wspace=0.14)
    stack = columns[0].subgridspec(len(roles), 1, height_ratios=[_HEIGHT[r] for r in roles], hspace=0.10)
    strip = {role: drawn.add_subplot(stack[i]) for i, role in enumerate(roles)}
    with_ecg = "ecg" in roles
    right = columns[1].subgridspec(3 if with_ecg else 2, 1, height_ratios=[0.55, 2.35, 1.75] if with_ecg else [2.9, 1.75], hspace=0.30)
    beat = {role: drawn.add_subplot(right[i]) for i, role in enumerate(["ecg", "cvp"] if with_ecg else ["cvp"])}
    return strip, beat, drawn.add_subplot(right[len(beat)]), drawn.add_subplot(rows[1])


def _write_title(drawn: Figure, result: Result) -> None:
    """Name; then length, beats and marks; then what could not be done."""
    beats, marks = result.beats, result.marks
    counts = marks["mark"].value_counts()
    waves = "  ".join(f"{w} {counts[w]}" for w in WAVES if w in counts)
    parts = [
        _ink.length_text(result.recording.duration_s),
        f"{len(beats)} beats, {int(beats['usable'].sum())} usable",
        f"{len(marks)} marks" + (f"  ({waves})" if waves else ""),
    ]
    start_s, stop_s = result.run.get("start_s"), result.run.get("stop_s")
    if start_s or stop_s is not None:
        parts.insert(1, f"analysed from {start_s or 0:g} s to {'the end' if stop_s is None else f'{stop_s:g} s'}")
    if result.delay_text:
        parts.append(f"delay {result.delay_text}")
    drawn.text(0.05, 0.972, result.recording.name, fontsize=15, fontweight="bold", color=_ink.INK, ha="left", va="top")
    drawn.text(0.05, 0.938, "   ·   ".join(parts), fontsize=10, color=_ink.INK, ha="left", va="top")
    if result.warnings:
        said = "; ".join(result.warnings)
        drawn.text(0.965, 0.972, _wrapped(said), fontsize=9, color="#8A4B08", ha="right", va="top", linespacing=1.35)


def _wrapped(text: str, width: int = 95, most: int = 3) -> str:
    """Up to `most` lines of about equal length."""
    from textwrap import wrap

    rows = min(most, -(-len(text) // width))
    lines = wrap(text, max(width * (rows == most), min(width, len(text) // max(rows, 1) + 12)))
    return "\n".join([*lines[: most - 1], lines[most - 1] + " …"] if len(lines) > most else lines)


def _write_legend(ax: Axes, result: Result, strip: tuple[float, float]) -> None:
    """What filled, open and hatched marks mean; only those that occur in the strip."""
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    states = set(result.marks.loc[result.marks["time_s"].between(*strip), "state"])
    sources = set(result.beats.loc[result.beats["r_time_s"].between(*strip), "source"])
    handles: list[Line2D | Patch] = []
    for state, text in _LEGEND:
        if state in states:
            face = _ink.SOFT if state == "clear" else "white"
            size = 4.5 if state == "fused" else 6
            handles.append(Line2D([], [], marker="o", linestyle="", color=_ink.SOFT, markerfacecolor=face, markersize=size, label=text))
    if "ecg" in result.roles and not sources <= set(SEEN_ON_ECG):
        label = "R by another trace"
        handles.append(Line2D([], [], marker="v", linestyle="", color=_ink.SOFT, markerfacecolor="white", markersize=5, label=label))
    if len(result.spans):
        handles.append(Patch(facecolor=_ink.SHADE, label="unusable"))
    if handles:
        ax.legend(
            handles=handles, loc="lower left", bbox_to_anchor=(-0.01, 1.0), ncols=len(handles), frameon=False, fontsize=_ink.MARGIN_NOTE,
            labelcolor=_ink.SOFT, handletextpad=0.3, columnspacing=1.4, borderaxespad=0.1,
        )
