"""The figure of a processed venous pressure, in NeuroKit2's manner."""

from __future__ import annotations

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
    marks = {w: np.flatnonzero(cvp_signals[column_of(w)].to_numpy() == 1) for w in WAVES if column_of(w) in cvp_signals}

    figure = plt.figure(figsize=(13, 7), layout="constrained")
    figure.suptitle("Central venous pressure (CVP)", fontweight="bold")
    grid = figure.add_gridspec(2, 2, width_ratios=[2, 1])
    trace = figure.add_subplot(grid[0, 0])
    trend = figure.add_subplot(grid[1, 0], sharex=trace)
    beats = figure.add_subplot(grid[:, 1])
    _draw_trace(trace, time, cvp_signals, clean, marks)
    _draw_trend(trend, time, clean, marks)
    _draw_beats(beats, clean, np.flatnonzero(cvp_signals[R_COLUMN].to_numpy() == 1), rate)
    trend.set_xlabel("Time (seconds)" if rate else "Time (samples)")
    beats.set_xlabel(f"Time from R ({'seconds' if rate else 'samples'})")
    return figure


def _limits(values: NDArray[np.float64]) -> tuple[float, float]:
    """Limits of the pressure axis: what the patient shows, not the bag of a flush."""
    known = values[np.isfinite(values)]
    if not len(known):
        return 0.0, 20.0
    low, middle, high = np.percentile(known, [2, 50, 98])
    room = max(high - low, 2.0)
    return float(max(known.min(), middle - 2 * room)) - 0.15 * room, float(min(known.max(), middle + 2 * room)) + 0.15 * room


def _draw_trace(
    axes: Axes, time: NDArray[np.float64], signals: pd.DataFrame, clean: NDArray[np.float64], marks: dict[str, NDArray[np.int64]]
) -> None:
    low, high = _limits(clean)
    quality = signals["CVP_Quality"].to_numpy(np.float64)
    axes.fill_between(time, low, low + quality * (high - low), color=_QUALITY, alpha=0.12, linewidth=0, zorder=0, label="Quality, 0 to 1")
    axes.plot(time, signals["CVP_Raw"].to_numpy(), color=_RAW, linewidth=1.2, zorder=1, label="Raw")
    axes.plot(time, clean, color=_CLEAN, linewidth=0.9, zorder=2, label="Cleaned")
    for wave, at in marks.items():
        if len(at):
            marker = "^" if WAVES[wave].is_peak else "v"
            axes.scatter(time[at], clean[at], s=22, marker=marker, color=WAVES[wave].color, zorder=3, label=wave)
    axes.set(title="Signal and waves", ylabel="Pressure (mmHg)", ylim=(low, high + _HEADROOM * (high - low)))
    axes.margins(x=0)
    axes.legend(loc="upper right", ncols=5, fontsize="small")


def _draw_trend(axes: Axes, time: NDArray[np.float64], clean: NDArray[np.float64], marks: dict[str, NDArray[np.int64]]) -> None:
    for wave in ("a", "z", "x", "v", "y"):
        at = marks.get(wave, np.empty(0, np.int64))
        if len(at):
            axes.plot(time[at], clean[at], marker=".", markersize=4, linewidth=0.8, color=WAVES[wave].color, label=wave)
    axes.set(title="Pressure at each wave", ylabel="Pressure (mmHg)")
    if axes.lines:
        low, high = axes.get_ylim()
        axes.set_ylim(low, high + _HEADROOM * (high - low))
        axes.legend(loc="upper right", ncols=5, fontsize="small")


def _draw_beats(axes: Axes, clean: NDArray[np.float64], r: NDArray[np.int64], rate: float | None) -> None:
    axes.set(title="Single beats", ylabel="Pressure (mmHg)")
    if len(r) < 2:
        return
    length = round(float(np.median(np.diff(r))))
    before = round(0.25 * length)
    chosen = r[np.unique(np.linspace(0, len(r) - 1, _BEATS_DRAWN).astype(int))]
    chosen = chosen[(chosen >= before) & (chosen + length <= len(clean))]
    if not len(chosen):
        return
    offsets = np.arange(-before, length)
    pieces = clean[chosen[:, None] + offsets]
    low, high = _limits(clean)
    inside = ((pieces > low) & (pieces < high)).all(axis=1)
    if not inside.any():
        return
    at = offsets / (rate or 1.0)
    axes.plot(at, pieces[inside].T, color=_RAW, linewidth=0.6, alpha=max(0.15, min(1.0, 10 / inside.sum())))
    axes.plot(at, np.median(pieces[inside], axis=0), color="#C62828", linewidth=2, label="Median beat")
    axes.axvline(0, color=_CLEAN, linewidth=0.8, linestyle=":")
    axes.margins(x=0)
    axes.legend(loc="upper right", fontsize="small")
