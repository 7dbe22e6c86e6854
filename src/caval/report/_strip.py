"""The strip: some seconds of the record as a monitor would show them, with the marks."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from caval.recording import Signal
from caval.report import _ink
from caval.vocabulary import STATES, WAVES

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from caval.result import Result

__all__ = ["SEEN_ON_ECG", "STRIP_S", "choose_strip", "draw_strip"]

SEEN_ON_ECG = ("ecg", "fused", "given")
"""Sources of beats whose R is not an estimate from other traces."""
STRIP_S = 9.0
"""Two to four breaths, eight to fifteen beats: what an eye takes in at once."""
_LEAD_S = 0.35
"""The strip starts this long before an R, so that the first beat shows its a wave."""


def choose_strip(result: Result, length_s: float = STRIP_S) -> tuple[float, float]:
    """Start and stop (s) of the strip to show.

    Of the stretches that start just before a usable beat, those with nearly as many sure marks a beat as the best are kept, so that
    there is something to see; of these the one that is most like the whole record (interval, levels, unrest, place in time) is taken, so
    that it is not merely the prettiest. Without marks: the middle of the analysed stretch that is not shaded, if there is one.
    """
    first, last = _analysed(result)
    length_s = min(length_s, last - first)
    latest = last - length_s
    usable = result.beats[result.beats["usable"].to_numpy(bool)]
    r = usable["r_time_s"].to_numpy(float)
    starts = np.clip(r - _LEAD_S, first, latest)
    if not len(starts) or not len(result.marks):
        starts = np.linspace(first, latest, 200)
    # h is left out: where the trace is restless, small waves between y and a look like one.
    sure = result.marks[(result.marks["state"] == "clear") & (result.marks["mark"] != "h")]
    total, _, _ = _moments(sure["time_s"].to_numpy(float), sure["confidence"].to_numpy(float), starts, length_s)
    _, _, beats = _moments(result.beats["r_time_s"].to_numpy(float), np.ones(len(result.beats)), starts, length_s)
    worth = total / np.maximum(beats, 1) - 60.0 * _shaded_share(result, starts, length_s)
    kept = worth >= worth.max() - 0.15 * max(float((total / np.maximum(beats, 1)).max()), 0.1)
    unlike = np.abs(starts + length_s / 2 - (first + last) / 2) / (last - first)
    for column in ("rr_s", "mean_mmhg", "a_mmhg", "x_mmhg", "v_mmhg"):
        unlike += _unlike(r, usable[column].to_numpy(float), starts, length_s)
    best = float(starts[np.where(kept, unlike, np.inf).argmin()])
    return best, best + length_s


def _analysed(result: Result) -> tuple[float, float]:
    """The stretch of the record that the run looked at."""
    first = float(result.run.get("start_s") or 0.0)
    stop = result.run.get("stop_s")
    last = result.recording.duration_s if stop is None else min(float(stop), result.recording.duration_s)
    return (first, last) if last > first else (0.0, max(result.recording.duration_s, 1.0))


def _moments(time: NDArray, value: NDArray, starts: NDArray, length_s: float) -> tuple[NDArray, NDArray, NDArray]:
    """Sum, sum of squares and number of the values in each stretch; `time` in order."""
    cuts = np.searchsorted(time, starts), np.searchsorted(time, starts + length_s)
    sums = (np.r_[0.0, np.cumsum(v)] for v in (value, value**2))
    first, second = (s[cuts[1]] - s[cuts[0]] for s in sums)
    return first, second, cuts[1] - cuts[0]


def _shaded_share(result: Result, starts: NDArray, length_s: float) -> NDArray[np.float64]:
    """Share of each stretch in which a channel that is shown is unusable; the venous trace counts in full, the others half."""
    total = np.zeros(len(starts))
    for role, weight in (("cvp", 1.0), ("ecg", 0.5), ("abp", 0.5)):
        for start, stop, _ in _ink.merged(result.spans, result.roles.get(role, "")):
            total += weight * np.clip(np.minimum(stop, starts + length_s) - np.maximum(start, starts), 0, None) / length_s
    return total


def _unlike(time: NDArray, value: NDArray, starts: NDArray, length_s: float) -> NDArray[np.float64]:
    """How unlike the record each stretch is: its mean's distance from the median, in quartile ranges, and its spread beyond the usual.

    0 where nothing is known, 1 for a stretch without a value.
    """
    known = np.isfinite(value)
    time, value = time[known], value[known]
    if len(value) < 4:
        return np.zeros(len(starts))
    low, middle, high = np.percentile(value, [25, 50, 75])
    first, second, n = _moments(time, value - middle, starts, length_s)
    mean = first / np.maximum(n, 1)
    spread = np.sqrt(np.maximum(second / np.maximum(n, 1) - mean**2, 0.0))
    usual = float(np.median(spread[n > 2])) if (n > 2).any() else 0.0
    return np.where(n > 0, np.abs(mean) / max(high - low, 1e-3) + np.maximum(spread - usual, 0.0) / max(usual, 1e-3), 1.0)


def draw_strip(axes: dict[str, Axes], result: Result, stretch: tuple[float, float]) -> None:
    """Draw the panels in `axes` (by role, top to bottom) on one time axis."""
    write_time, unit, steps = _ink.clock(result.recording.duration_s, fine=True)
    r = result.beats["r_time_s"].to_numpy(float)
    beats = result.beats[(r >= stretch[0]) & (r < stretch[1])]
    r_times = beats["r_time_s"].to_numpy(float)
    for role, ax in axes.items():
        _ink.plain(ax)
        ax.set_xlim(*stretch)
        signal = _ink.read_role(result, role, *stretch)
        spans = _ink.merged(result.spans, signal.label)
        _set_limits(ax, role, signal, spans)
        _ink.shade(ax, spans, inside=stretch, at_top=role != "ecg")
        ax.vlines(r_times, 0, 1, transform=ax.get_xaxis_transform(), color=_ink.PALE, linewidth=0.9, zorder=1)
        ax.plot(signal.time_s, signal.values, color=_ink.ROLE_INK[role], linewidth=0.9 if role == "ecg" else 1.2, zorder=3)
        ax.set_ylabel(f"{role.upper()}  {signal.unit}".strip(), fontsize=9, color=_ink.ROLE_INK[role])
        if signal.label.strip().upper() != role.upper():
            _corner(ax, signal.label)
        ax.set_xticks(_ink.ticks(*stretch, steps))
        ax.xaxis.set_major_formatter(write_time)
        ax.yaxis.set_label_coords(-0.058, 0.5)
        ax.tick_params(labelbottom=False)
    bottom = list(axes.values())[-1]
    bottom.tick_params(labelbottom=True)
    bottom.set_xlabel(f"time of the record, {unit}", fontsize=_ink.MARGIN_NOTE, color=_ink.SOFT, labelpad=2)
    if "ecg" in axes:
        _write_r(axes["ecg"], beats["r_time_s"].to_numpy(float), beats["source"].astype(str).to_numpy())
    if "cvp" in axes:
        _draw_marks(axes["cvp"], result, stretch)


def _set_limits(ax: Axes, role: str, signal: Signal, spans: list[tuple[float, float, str]]) -> None:
    """Limits by most of what is usable: a flush or a burst of diathermy must not press the waves flat."""
    values, time = signal.values, signal.time_s
    good = np.isfinite(values)
    for start, stop, _ in spans:
        good &= (time < start) | (time > stop)
    shown = values[good] if good.sum() > 10 else values
    pieces = [p for p in np.array_split(shown, max(1, round(len(shown) / signal.sampling_rate))) if np.isfinite(p).any()]
    if pieces:
        # Each piece of about a second holds a beat; one beat more than half as tall again as most is let out of the picture.
        low = np.quantile([np.nanmin(p) for p in pieces], 0.25)
        high = np.quantile([np.nanmax(p) for p in pieces], 0.75)
        shown = np.clip(shown, low - 0.5 * (high - low), high + 0.5 * (high - low))
    room = {"ecg": (0.08, 0.30, 0.2), "cvp": (0.20, 0.20, 2.0), "abp": (0.08, 0.12, 5.0)}[role]
    ax.set_ylim(*_ink.limits(shown, below=room[0], above=room[1], least=room[2]))


def _corner(ax: Axes, text: str) -> None:
    ax.annotate(
        text, (1.0, 1.0), xycoords="axes fraction", xytext=(-3, 1), textcoords="offset points", ha="right", va="bottom",
        fontsize=_ink.MARGIN_NOTE, color=_ink.SOFT,
    )


def _write_r(ax: Axes, times: NDArray, source: NDArray) -> None:
    """A small triangle and R for beats seen on the ECG, an open triangle for those that other traces show."""
    own = np.isin(source, SEEN_ON_ECG)
    for mask, face in ((own, _ink.ROLE_INK["ecg"]), (~own, "white")):
        ax.scatter(
            times[mask], np.full(mask.sum(), 0.90), marker="v", s=22, transform=ax.get_xaxis_transform(), facecolors=face,
            edgecolors=_ink.ROLE_INK["ecg"], linewidths=0.9, zorder=4,
        )
    if len(times):
        ax.annotate(
            "R", (times[0], 0.90), xycoords=ax.get_xaxis_transform(), xytext=(7, 0), textcoords="offset points", ha="center",
            va="center_baseline", fontsize=_ink.LETTER_PT, fontweight="bold", color=_ink.ROLE_INK["ecg"],
        )


def _draw_marks(ax: Axes, result: Result, stretch: tuple[float, float]) -> None:
    shown = result.marks[(result.marks["time_s"] >= stretch[0]) & (result.marks["time_s"] < stretch[1])]
    for wave in WAVES:
        for state in STATES[:3]:
            rows = shown[(shown["mark"] == wave) & (shown["state"] == state)]
            _ink.draw_mark(ax, wave, state, rows["time_s"].to_numpy(float), rows["pressure_mmhg"].to_numpy(float))
    _ink.letters(ax, list(zip(shown["time_s"], shown["pressure_mmhg"], shown["mark"], strict=True)))
