"""The figure of a processed venous pressure, in NeuroKit2's manner."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval.errors import InputError
from caval.vocabulary import WAVES
from caval_neurokit._marked import R_COLUMN, column_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["cvp_plot"]

Floats = NDArray[np.float64]
Samples = NDArray[np.int64]

_RAW, _CLEAN, _QUALITY = "#B0BEC5", "#37474F", "#4CAF50"
_HEADROOM = 0.2
"""Share of the axis kept free for the legend."""
_BEATS_DRAWN = 200
"""More single beats than this make a blot, not a picture; as many are taken evenly from the record."""


def cvp_plot(cvp_signals: pd.DataFrame, info: dict[str, Any] | None = None) -> Figure:
    """Draw what `cvp_process` gave: the trace with its marks, the pressures beat by beat, and the beats laid over one another.

    Parameters
    ----------
    cvp_signals : DataFrame
        From `cvp_process`; may be cropped, marks are taken from its marker columns.
    info : dict, optional
        From `cvp_process`; only ``sampling_rate`` (Hz) is used, without it time is in samples.

    Returns
    -------
    matplotlib.figure.Figure
        Also the current figure of pyplot, as the host's plots are. Close it when it is no longer needed.

    Raises
    ------
    InputError
        Not the DataFrame of `cvp_process`.

    Examples
    --------
    >>> from caval.model.sketch import sketch
    >>> from caval_neurokit import cvp_process
    >>> drawn = sketch(minutes=0.25)
    >>> figure = cvp_plot(*cvp_process(drawn.recording.read("CVP"), rpeaks=drawn.r_times_s * 125, sampling_rate=125))
    >>> [axes.get_title() for axes in figure.axes]
    ['Signal and waves', 'Pressure at each wave', 'Single beats']
    """
    wanted = ["CVP_Raw", "CVP_Clean", "CVP_Quality", R_COLUMN]
    if not isinstance(cvp_signals, pd.DataFrame) or not set(wanted) <= set(cvp_signals.columns):
        raise InputError(f"caval error: cvp_plot(): 'cvp_signals' must be the DataFrame of cvp_process(), with {', '.join(wanted)}")
    from matplotlib import pyplot as plt

    rate = float(info["sampling_rate"]) if info and "sampling_rate" in info else None
    time = np.arange(len(cvp_signals)) / (rate or 1.0)
    clean = cvp_signals["CVP_Clean"].to_numpy(np.float64)
    quality = cvp_signals["CVP_Quality"].to_numpy(np.float64)
    limits = _limits(clean, quality)
    marks = {w: np.flatnonzero(cvp_signals[column_of(w)].to_numpy() == 1) for w in WAVES if column_of(w) in cvp_signals}

    figure = plt.figure(figsize=(13, 7), layout="constrained")
    figure.suptitle("Central venous pressure (CVP)", fontweight="bold")
    grid = figure.add_gridspec(2, 2, width_ratios=[2, 1])
    trace = figure.add_subplot(grid[0, 0])
    trend = figure.add_subplot(grid[1, 0], sharex=trace)
    beats = figure.add_subplot(grid[:, 1])
    _draw_trace(trace, time, cvp_signals["CVP_Raw"].to_numpy(np.float64), clean, quality, marks, limits)
    _draw_trend(trend, time, clean, marks)
    _draw_beats(beats, clean, quality, np.flatnonzero(cvp_signals[R_COLUMN].to_numpy() == 1), rate, limits)
    trend.set_xlabel("Time (seconds)" if rate else "Time (samples)")
    beats.set_xlabel(f"Time from R ({'seconds' if rate else 'samples'})")
    return figure


def _limits(clean: Floats, quality: Floats) -> tuple[float, float]:
    """Limits of the pressure axis: what the patient shows, not the bag of a flush."""
    known = np.isfinite(clean)
    shown = clean[known & (quality > 0)] if (known & (quality > 0)).any() else clean[known]
    if not len(shown):
        return 0.0, 20.0
    low, high = np.percentile(shown, [0.5, 99.5])
    room = 0.2 * max(high - low, 2.0)
    return float(low - room), float(high + room)


def _draw_trace(
    axes: Axes, time: Floats, raw: Floats, clean: Floats, quality: Floats, marks: Mapping[str, Samples], limits: tuple[float, float]
) -> None:
    low, high = limits
    axes.fill_between(time, low, low + quality * (high - low), color=_QUALITY, alpha=0.12, linewidth=0, zorder=0, label="Quality, 0 to 1")
    axes.plot(time, raw, color=_RAW, linewidth=1.2, zorder=1, label="Raw")
    axes.plot(time, clean, color=_CLEAN, linewidth=0.9, zorder=2, label="Cleaned")
    for wave, at in marks.items():
        if len(at):
            size = float(np.clip(1500 / len(at), 5, 24))
            marker = "^" if WAVES[wave].is_peak else "v"
            axes.scatter(time[at], clean[at], s=size, marker=marker, color=WAVES[wave].color, zorder=3, label=wave)
    axes.set(title="Signal and waves", ylabel="Pressure (mmHg)", ylim=(low, high + _HEADROOM * (high - low)))
    axes.margins(x=0)
    axes.legend(loc="upper right", ncols=5, fontsize="small")


def _draw_trend(axes: Axes, time: Floats, clean: Floats, marks: Mapping[str, Samples]) -> None:
    for wave in ("a", "z", "x", "v", "y"):
        at = marks.get(wave, np.empty(0, np.int64))
        if len(at):
            steps = np.diff(at)
            usual = float(np.median(steps)) if len(steps) else np.inf
            breaks = np.flatnonzero(steps > 3 * usual) + 1  # no line across beats without the wave
            x, y = np.insert(time[at], breaks, np.nan), np.insert(clean[at], breaks, np.nan)
            axes.plot(x, y, marker=".", markersize=4, linewidth=0.8, color=WAVES[wave].color, label=wave)
    axes.set(title="Pressure at each wave", ylabel="Pressure (mmHg)")
    if axes.lines:
        low, high = axes.get_ylim()
        axes.set_ylim(low, high + _HEADROOM * (high - low))
        axes.legend(loc="upper right", ncols=5, fontsize="small")


def _draw_beats(axes: Axes, clean: Floats, quality: Floats, r: Samples, rate: float | None, limits: tuple[float, float]) -> None:
    axes.set(title="Single beats", ylabel="Pressure (mmHg)")
    if len(r) < 2:
        return
    length = round(float(np.median(np.diff(r))))
    before = round(0.25 * length)
    chosen = r[(r >= before) & (r + length <= len(clean)) & (quality[r] > 0)]
    if not len(chosen):
        return
    chosen = chosen[np.unique(np.linspace(0, len(chosen) - 1, _BEATS_DRAWN).astype(int))]
    offsets = np.arange(-before, length)
    pieces = clean[chosen[:, None] + offsets]
    pieces = pieces[((pieces > limits[0]) & (pieces < limits[1])).all(axis=1)]
    if not len(pieces):
        return
    at = offsets / (rate or 1.0)
    axes.plot(at, pieces.T, color=_RAW, linewidth=0.6, alpha=max(0.15, min(1.0, 10 / len(pieces))))
    axes.plot(at, np.median(pieces, axis=0), color="#C62828", linewidth=2, label="Median beat")
    axes.axvline(0, color=_CLEAN, linewidth=0.8, linestyle=":")
    axes.margins(x=0)
    axes.legend(loc="upper right", fontsize="small")
