"""The median beat: the venous trace aligned on R, with where and how high each wave lies."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval.report import _ink
from caval.vocabulary import WAVES

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from caval.result import Result

__all__ = ["MOST_BEATS", "draw_beat", "draw_readings", "states_that_count", "wave_summary"]

MOST_BEATS = 200
"""Beats that are read for the picture, spread over the record; enough for steady quartiles, quick from any file."""
_BEFORE_S = 0.30
_GRID_HZ = 250.0
_LEAST_SHARE = 0.2
"""Waves that fewer of the beats show stand in the numbers, not in the picture."""


@dataclass(frozen=True)
class WaveSummary:
    """A wave over the usable beats: quartiles of its time after R (s) and pressure (mmHg), and the share of beats that show it."""

    wave: str
    n: int
    share: float
    time_s: NDArray[np.float64]
    mmhg: NDArray[np.float64]


def states_that_count(wave: str) -> tuple[str, ...]:
    """States in which a mark's pressure is a reading of its own."""
    return ("clear", "weak", "fused") if wave == "z" else ("clear", "weak")


def wave_summary(result: Result) -> list[WaveSummary]:
    """Every wave that at least three usable beats show, in the order of one beat.

    Fused marks are left out, except for z, which is a place to read at, not an extremum, and stands without one.
    """
    usable = result.beats[result.beats["usable"].to_numpy(bool)]
    found = []
    for wave in WAVES:
        rows = usable[usable[f"{wave}_state"].isin(states_that_count(wave))]
        if len(rows) >= 3:
            after = (rows[f"{wave}_time_s"] - rows["r_time_s"]).to_numpy(float)
            quartiles = [np.nanpercentile(v, [25, 50, 75]) for v in (after, rows[f"{wave}_mmhg"].to_numpy(float))]
            found.append(WaveSummary(wave, len(rows), len(rows) / len(usable), *quartiles))
    return found


def draw_beat(axes: dict[str, Axes], result: Result) -> None:
    """Draw the median ECG and CVP beat in `axes`."""
    usable = result.beats[result.beats["usable"].to_numpy(bool)]
    summary = wave_summary(result)
    offsets = _offsets(usable)
    n = min(len(usable), MOST_BEATS)
    for role, ax in axes.items():
        beats = _stack(result, role, usable, offsets)
        if beats is None:
            ax.set_axis_off()
            continue
        _ink.plain(ax)
        ax.set_xlim(offsets[0] * 1000, offsets[-1] * 1000)
        ax.axvline(0, color=_ink.PALE, linewidth=0.9, zorder=1)
        low, middle, high = beats
        if role == "cvp":
            ax.fill_between(offsets * 1000, low, high, color=_ink.ROLE_INK[role], alpha=0.13, linewidth=0, zorder=2)
        ax.plot(offsets * 1000, middle, color=_ink.ROLE_INK[role], linewidth=1.0 if role == "ecg" else 1.7, zorder=3)
        if role == "cvp":
            _draw_summary(ax, summary, low, high)
        else:
            ax.set_ylim(*_ink.limits(middle, least=0.2))
            ax.set_yticks([])
            ax.spines["left"].set_visible(False)
            ax.tick_params(labelbottom=False)
    top = next(iter(axes.values()))
    if not len(usable):
        top.text(0.0, 1.0, "Median beat: there is no usable beat", transform=top.transAxes, va="bottom", fontsize=9.5, color=_ink.INK)
        return
    axes["cvp"].set_ylabel("CVP  mmHg", fontsize=9, color=_ink.ROLE_INK["cvp"])
    axes["cvp"].set_xlabel("time after R, ms", fontsize=_ink.MARGIN_NOTE, color=_ink.SOFT, labelpad=2)
    top.set_title(f"Median beat and quartiles ({n} of {len(usable)} usable beats)", fontsize=9.5, color=_ink.INK, loc="left", pad=6)


def _offsets(usable: pd.DataFrame) -> NDArray[np.float64]:
    """Times after R (s) that the picture covers: from before a to the next R, at a usual interval."""
    rr = usable["rr_s"].to_numpy(float)
    typical = float(np.nanmedian(rr)) if np.isfinite(rr).any() else 0.8
    return np.arange(-_BEFORE_S, min(max(typical, 0.35), 1.6) + 0.02, 1 / _GRID_HZ)


def _stack(result: Result, role: str, usable: pd.DataFrame, offsets: NDArray) -> NDArray[np.float64] | None:
    """Quartiles, shape (3, len(offsets)), of the trace round R over at most MOST_BEATS beats; None without beats."""
    if not len(usable):
        return None
    chosen = usable["r_time_s"].to_numpy(float)[np.unique(np.linspace(0, len(usable) - 1, MOST_BEATS).round().astype(int))]
    rows = []
    for r in chosen:
        piece = _ink.read_role(result, role, r + offsets[0] - 0.1, r + offsets[-1] + 0.1)
        rows.append(piece.at(r + offsets) if len(piece) else np.full(len(offsets), np.nan))
    stacked = np.asarray(rows)
    if role == "ecg":
        stacked = stacked - np.nanmedian(np.where(np.isfinite(stacked).any(axis=1, keepdims=True), stacked, 0.0), axis=1, keepdims=True)
    enough = np.isfinite(stacked).sum(axis=0) >= max(1, 0.3 * len(stacked))
    quartiles = np.full((3, len(offsets)), np.nan)
    if enough.any():
        quartiles[:, enough] = np.nanpercentile(stacked[:, enough], [25, 50, 75], axis=0)
    return quartiles


def _draw_summary(ax: Axes, summary: list[WaveSummary], low: NDArray, high: NDArray) -> None:
    """Marks at their median place with quartile bars; a wave that few beats show would float beside the median beat of all."""
    summary = [s for s in summary if s.share >= _LEAST_SHARE]
    corners = [q for s in summary for q in (s.mmhg[0], s.mmhg[2])]
    ax.set_ylim(*_ink.limits(np.r_[low, high, corners], below=0.17, above=0.18, least=2.0))
    for s in summary:
        color = WAVES[s.wave].color
        ms, p = s.time_s * 1000, s.mmhg
        ax.plot([ms[0], ms[2]], [p[1], p[1]], color=color, linewidth=1.2, zorder=4)
        ax.plot([ms[1], ms[1]], [p[0], p[2]], color=color, linewidth=1.2, zorder=4)
        _ink.draw_mark(ax, s.wave, "clear", ms[1:2], p[1:2], size=46)
    ends = [float(s.mmhg[2] if WAVES[s.wave].is_peak else s.mmhg[0]) for s in summary]
    _ink.letters(ax, [(float(s.time_s[1] * 1000), end, s.wave) for s, end in zip(summary, ends, strict=True)], points=11)


def draw_readings(ax: Axes, result: Result) -> None:
    """The numbers under the median beat, a row a wave."""
    ax.set_axis_off()
    summary = wave_summary(result)
    columns = ((0.0, "left"), (0.27, "right"), (0.56, "right"), (0.79, "right"), (1.0, "right"))
    head = ("", "mmHg", "quartiles", "ms after R", "of beats")
    rows = [
        (s.wave, _signed(s.mmhg[1], 1), _range(s.mmhg), _signed(s.time_s[1] * 1000), _percent(s.share)) for s in summary
    ]
    mean = result.beats.loc[result.beats["usable"].to_numpy(bool), "mean_mmhg"].dropna()
    if len(mean):
        quartiles = np.percentile(mean, [25, 50, 75])
        rows.append(("mean", _signed(quartiles[1], 1), _range(quartiles), "", ""))
    if not rows:
        return
    step = min(1.0 / (len(rows) + 1), 0.125)
    for i, row in enumerate([head, *rows]):
        for (x, side), text in zip(columns, row, strict=True):
            color = _ink.SOFT if i == 0 else _ink.INK
            bold = i > 0 and x == columns[0][0]
            if bold and text in WAVES:
                color = _ink.dark(WAVES[text].color)
            ax.text(
                x, 1 - (i + 0.5) * step, text, transform=ax.transAxes, ha=side, va="center", fontsize=8.5, color=color,
                fontweight="bold" if bold else "normal",
            )
    ax.plot([0, 1], [1 - step] * 2, transform=ax.transAxes, color=_ink.PALE, linewidth=0.8, clip_on=False)


def _signed(value: float, digits: int = 0) -> str:
    """A number with a true minus sign; never a minus nought."""
    return f"{round(value, digits) + 0.0:.{digits}f}".replace("-", "−")


def _range(quartiles: NDArray) -> str:
    return f"{_signed(quartiles[0], 1)} to {_signed(quartiles[2], 1)}"


def _percent(share: float) -> str:
    """Whole per cent that never rounds a little to none or nearly all to all."""
    if 0 < share < 0.01:
        return "< 1 %"
    return "> 99 %" if 0.99 < share < 1 else f"{share * 100:.0f} %"
