"""The trend: how the readings go over the record."""

from __future__ import annotations

from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval.report import _ink
from caval.report._beat import states_that_count
from caval.tables import rhythm_stretches
from caval.vocabulary import WAVES

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from caval.result import Result

__all__ = ["draw_trend", "window_quartiles"]

_WINDOWS_S = (10, 15, 20, 30, 60, 120, 180, 300, 600, 900, 1800, 3600)
_FEWEST = 3
"""A quartile of fewer beats says nothing."""
_SHOWN = ("a", "z", "x", "v", "y")
"""c and h stand too close to their neighbours to be told apart here; the median beat has them."""


def window_quartiles(time_s: NDArray, value: NDArray, edges: NDArray) -> NDArray[np.float64]:
    """Quartiles of `value` per window between `edges`, shape (3, windows); NaN where fewer than three values lie."""
    found = np.full((3, len(edges) - 1), np.nan)
    known = np.isfinite(value)
    time_s, value = time_s[known], value[known]
    cuts = np.searchsorted(time_s, edges)
    for k, (low, high) in enumerate(pairwise(cuts)):
        if high - low >= _FEWEST:
            found[:, k] = np.percentile(value[low:high], [25, 50, 75])
    return found


def draw_trend(ax: Axes, result: Result, strip: tuple[float, float]) -> None:
    """Draw running medians with quartile bands of the mean and of the waves over the whole record."""
    duration_s = max(result.recording.duration_s, 1.0)
    write_time, unit, steps = _ink.clock(duration_s)
    _ink.plain(ax)
    ax.set_xlim(0, duration_s)
    window_s = next((w for w in _WINDOWS_S if duration_s / w <= 150), _WINDOWS_S[-1])
    edges = np.arange(0, duration_s + window_s, window_s)
    usable = result.beats[result.beats["usable"].to_numpy(bool)]
    lines = _lines(usable, edges)
    inside = [q for quartiles in lines.values() for q in quartiles[np.isfinite(quartiles)]]
    ax.set_ylim(*_robust(np.asarray(inside)))
    _ink.shade(ax, _ink.merged(result.spans, result.roles["cvp"], closer_s=duration_s / 400), inside=(0, duration_s), above=True)
    for name, quartiles in lines.items():
        color = WAVES[name].color if name in WAVES else _ink.INK
        x, (low, middle, high) = _stairs(edges, quartiles)
        ax.fill_between(x, low, high, color=color, alpha=0.14, linewidth=0, zorder=2)
        ax.plot(x, middle, color=color, linewidth=1.8 if name == "mean" else 1.2, zorder=3.2 if name == "mean" else 3)
    _name_lines(ax, lines)
    _draw_rhythms(ax, rhythm_stretches(result.beats), duration_s)
    middle_s, half_s = sum(strip) / 2, max(strip[1] - strip[0], duration_s / 200) / 2  # never too narrow to see
    ax.plot(
        [middle_s - half_s, middle_s + half_s], [0, 0], transform=ax.get_xaxis_transform(), color=_ink.INK, linewidth=4,
        solid_capstyle="butt", clip_on=False, zorder=6,
    )
    ax.set_xticks(_ink.ticks(0, duration_s, steps, most=16))
    ax.xaxis.set_major_formatter(write_time)
    ax.set_ylabel("mmHg", fontsize=9, color=_ink.INK)
    below = f"time of the record, {unit}; the bar on the axis is the strip above"
    ax.set_xlabel(below, fontsize=_ink.MARGIN_NOTE, color=_ink.SOFT, labelpad=2)
    what = f"median and quartiles of the usable beats in windows of {_span(window_s)}" if lines else "no readings"
    ax.set_title(f"Trend: {what}", fontsize=9.5, color=_ink.INK, loc="left", pad=6)
    if not lines:
        ax.set_yticks([])


def _draw_rhythms(ax: Axes, stretches: pd.DataFrame, duration_s: float) -> None:
    """The word of each rhythm at the foot, from a dashed line where it begins; words that have no room are left out."""
    per_s = ax.get_window_extent().width / duration_s
    for k, row in enumerate(stretches.itertuples(index=False)):
        if k:
            ax.axvline(row.onset_s, color=_ink.SOFT, linewidth=0.8, linestyle=(0, (4, 3)), zorder=2.5)
        if row.duration_s * per_s > 6.0 * len(row.rhythm) + 10:
            ax.annotate(
                row.rhythm, (row.onset_s, 0.0), xycoords=ax.get_xaxis_transform(), xytext=(4, 5), textcoords="offset points",
                fontsize=_ink.MARGIN_NOTE, color=_ink.SOFT, zorder=5,
            )


def _lines(usable: pd.DataFrame, edges: NDArray) -> dict[str, NDArray[np.float64]]:
    time = usable["r_time_s"].to_numpy(float)
    values = {"mean": usable["mean_mmhg"].to_numpy(float)} | {
        w: usable[f"{w}_mmhg"].where(usable[f"{w}_state"].isin(states_that_count(w))).to_numpy(float) for w in _SHOWN
    }
    found = {name: window_quartiles(time, value, edges) for name, value in values.items()}
    return {name: quartiles for name, quartiles in found.items() if np.isfinite(quartiles).any()}


def _stairs(edges: NDArray, quartiles: NDArray) -> tuple[NDArray, NDArray]:
    """A level stretch a window, so that a window that stands alone still shows and a gap is not bridged."""
    return np.repeat(edges, 2)[1:-1], np.repeat(quartiles, 2, axis=1)


def _robust(values: NDArray) -> tuple[float, float]:
    """Limits by all but the last percent either side: one wild window must not flatten the rest."""
    if len(values) > 100:
        low, high = np.percentile(values, [1, 99])
        values = values[(values >= low) & (values <= high)]
    return _ink.limits(values, below=0.10, above=0.16, least=3.0)


def _name_lines(ax: Axes, lines: dict[str, NDArray]) -> None:
    """Names right of the lines' ends, at their last level, apart enough to read."""
    low, high = ax.get_ylim()
    last = {name: float(q[1][np.isfinite(q[1])][-1]) for name, q in lines.items()}
    apart = 13.0 / ax.get_window_extent().height * (high - low) * ax.figure.dpi / 100
    for name, level in _ink.spread({k: min(max(v, low), high) for k, v in last.items()}, apart).items():
        color = _ink.dark(WAVES[name].color) if name in WAVES else _ink.INK
        ax.annotate(
            name, (1.0, level), xycoords=ax.get_yaxis_transform(), xytext=(6, 0), textcoords="offset points", ha="left",
            va="center", fontsize=9, fontweight="bold", color=color, annotation_clip=False,
        )


def _span(seconds: float) -> str:
    return f"{seconds / 60:g} min" if seconds >= 60 else f"{seconds:g} s"
