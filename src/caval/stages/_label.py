"""Which extremum of a median beat is which wave.

All waves are told together: for every delay the line may have, each chain a < c < x < v < y of the picture's extrema is scored by how well
its members stand where the heart would put them, that much later, and by how far they stand out. The best chain names the waves. So a late
a after its P says that c, x and v are late too, and the v of a fast heart, which stands where a slow heart has its a, keeps its name.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import signal

__all__ = ["MedianBeat", "label"]

Floats = NDArray[np.float64]
Terms = list[tuple[float, Floats]]

_DELAYS_S = np.arange(0.0, 0.1201, 0.01)
_LOG_PRIOR = -0.5 * ((_DELAYS_S - 0.04) / 0.03) ** 2
"""Delays of line and monitor that are tried: 0.01 to 0.04 s is usual (from memory), long or soft lines go beyond."""
_LEFT_OUT = {"a": -3.5, "c": -1.2, "x": -4.0, "v": -6.0, "y": -3.0}
"""Score of a chain that lacks the wave."""
_PASSED_OVER = {"c": 3.0}
"""Further cost of leaving a wave out though an extremum as tall as the picture stands at its place."""
_LENIENT_A, _FAST_S = -1.5, 0.45
"""The same for a where no P is proven, and in a heart this fast, where a runs into c."""
_LATEST_A_S = 0.08
"""After R, where no P says that a may be later."""
_WEIGHT = {"a": 2.0, "c": 0.8, "x": 6.0, "v": 4.0, "y": 4.0}
"""Score of a wave that stands out by the whole height of the picture."""
_FARTHEST = 3.0
"""Standard deviations from its place, at the best delay, beyond which an extremum is not tried."""
_SURE_A = 4.0
"""Standard errors of the median above which a bump is an a without a proven P: where beats differ, as in fibrillation, ripples are not."""
_CANNON = 1.3
"""An early systolic wave this many times taller than v, without a P and at regular intervals, is the atrium's on a shut valve."""


@dataclass(frozen=True, eq=False)
class MedianBeat:
    """A median beat and what is known of it.

    Attributes
    ----------
    time_s, trace_mmhg, doubt_mmhg : float64 arrays, shape (n,)
        Time from R, the median, and its standard error.
    interval_s, span_mmhg, noise_mmhg : float
        Usual interval between beats, height of the median, its noise in the waves' band.
    atrial : str
        What the ECG shows of the atria: ``coupled``, ``apart``, ``absent`` or ``unknown``.
    pr_s : float
        From the onset of P to R where they are coupled, else NaN.
    regular : bool
        Whether the intervals are those of a pacemaker.
    """

    time_s: Floats
    trace_mmhg: Floats
    doubt_mmhg: Floats
    interval_s: float
    span_mmhg: float
    noise_mmhg: float
    atrial: str = "unknown"
    pr_s: float = np.nan
    regular: bool = True

    def extrema(self, sign: float) -> NDArray[np.int64]:
        """Indices of the peaks (sign 1) or troughs (-1) that stand out of the noise."""
        index, _ = signal.find_peaks(sign * self.trace_mmhg, prominence=max(0.012 * self.span_mmhg, 2.0 * self.noise_mmhg))
        return index


def label(beat: MedianBeat) -> dict[str, float]:
    """Time from R of each wave the beat shows, seconds; no entry for a wave it does not show.

    Where the heart puts them (seconds after R, before the delay; I is the interval, at most 1.6 s): a 0.095 after the onset of P (0.08 to
    0.10, from memory), or 0.10 before R where no P is known; c 0.09; x 0.19 + 0.03 I; v 0.20 + 0.24 I; y 0.04 + 0.11 I after v. The lines
    in I lie between the model's own circulation at 40 to 180/min and real hearts; the spreads around them are wide enough for both.
    """
    interval = min(beat.interval_s, 1.6)
    peaks, troughs = beat.extrema(1.0), beat.extrema(-1.0)
    terms = {
        "a": _terms("a", _atrial_peaks(peaks, beat), *_usual_a(beat), beat),
        "c": _terms("c", peaks, 0.09, 0.022, beat),
        "x": _terms("x", troughs, 0.19 + 0.03 * interval, 0.07, beat),
        "v": _terms("v", peaks, 0.20 + 0.24 * interval, 0.07, beat),
    }
    places = _best_chain(terms, {v: _terms_y(v, troughs, beat) for v, _ in terms["v"]}, beat.interval_s)
    _cannon(places, beat)
    if "c" not in places and "x" in places:
        corner = _corner(beat, places)
        places |= {} if corner is None else {"c": corner}
    return places | _h(beat, peaks, places)


def _terms(wave: str, index: NDArray[np.int64], usual: float, spread: float, beat: MedianBeat) -> Terms:
    """Extrema that may be the wave: (time from R, score at each delay); NaN stands for leaving it out."""
    sign = -1.0 if wave in "xy" else 1.0
    found: Terms = []
    passed_over = np.zeros(len(_DELAYS_S))
    prominence = signal.peak_prominences(sign * beat.trace_mmhg, index)[0] / beat.span_mmhg
    for k, stands in zip(index, prominence, strict=True):
        off = (beat.time_s[k] - usual - _DELAYS_S) / spread
        if np.abs(off).min() < _FARTHEST:
            passed_over = np.maximum(passed_over, stands * np.exp(-0.5 * off**2))
            found.append((float(beat.time_s[k]), _WEIGHT[wave] * sign * beat.trace_mmhg[k] / beat.span_mmhg - 0.5 * off**2))
    lenient = wave == "a" and (beat.atrial != "coupled" or beat.interval_s < _FAST_S)
    lacking = _LENIENT_A if lenient else _LEFT_OUT[wave]
    return [*found, (np.nan, lacking - _PASSED_OVER.get(wave, 0.0) * passed_over)]


def _terms_y(v: float, troughs: NDArray[np.int64], beat: MedianBeat) -> list[tuple[float, float]]:
    """Troughs that may be the y after this v, with their scores."""
    after = beat.time_s[troughs] - v
    near = troughs[(after > 0.04) & (after < 0.36)]
    interval = min(beat.interval_s, 1.6)
    off = (beat.time_s[near] - v - 0.04 - 0.11 * interval) / (0.03 + 0.05 * interval)
    scores = -_WEIGHT["y"] * beat.trace_mmhg[near] / beat.span_mmhg - 0.5 * off**2
    return [*zip(beat.time_s[near].tolist(), scores.tolist(), strict=True), (np.nan, _LEFT_OUT["y"])]


def _usual_a(beat: MedianBeat) -> tuple[float, float]:
    if not np.isfinite(beat.pr_s):
        return -0.10, 0.07
    return 0.095 - beat.pr_s, 0.04 if beat.interval_s < _FAST_S else 0.025  # in a fast heart QRS and T leave little of P to be seen


def _atrial_peaks(peaks: NDArray[np.int64], beat: MedianBeat) -> NDArray[np.int64]:
    """Peaks that may be an a at a fixed place before R: none where the ECG shows no P or one that goes its own way."""
    if beat.atrial == "apart" or (beat.atrial == "absent" and not beat.regular):
        return peaks[:0]
    if beat.atrial == "coupled":
        return peaks
    index, found = signal.find_peaks(beat.trace_mmhg, prominence=max(0.03 * beat.span_mmhg, 4.0 * beat.noise_mmhg))
    return index[(found["prominences"] > _SURE_A * beat.doubt_mmhg[index]) & (beat.time_s[index] < _LATEST_A_S)]


def _best_chain(terms: Mapping[str, Terms], ys: Mapping[float, list[tuple[float, float]]], interval_s: float) -> dict[str, float]:
    """The chain of waves in their order with the best score at its best delay. Comparisons with NaN, a wave left out, do not bind."""
    best, chosen = -np.inf, (np.nan,) * 5
    for a, a_score in terms["a"]:
        for c, c_score in terms["c"]:
            if c < a + 0.04:
                continue
            start = _LOG_PRIOR + a_score + c_score
            for x, x_score in terms["x"]:
                if x < a + 0.06 or x < c + 0.03:
                    continue
                for (v, v_score), tails in zip(terms["v"], ys.values(), strict=True):
                    if v < x + 0.05 or v < a + 0.10 or v < c + 0.08 or v > a + interval_s - 0.04 or v > c + interval_s - 0.08:
                        continue
                    latest = np.fmin(a, c) + interval_s - 0.03
                    y, y_score = max((tail for tail in tails if not tail[0] > latest), key=lambda tail: tail[1])
                    score = float((start + x_score + v_score).max()) + y_score
                    if score > best:
                        best, chosen = score, (a, c, x, v, y)
    return {wave: t for wave, t in zip("acxvy", chosen, strict=True) if np.isfinite(t)}


def _cannon(places: dict[str, float], beat: MedianBeat) -> None:
    """Rename to a what stands at c's place as an atrial wave on a shut valve would (see `_CANNON`)."""
    if beat.atrial != "absent" or not beat.regular or "a" in places or not {"c", "x", "v"} <= set(places):
        return
    c, x, v = (float(np.interp(places[w], beat.time_s, beat.trace_mmhg)) for w in "cxv")
    if c - x > _CANNON * (v - x):
        places["a"] = places.pop("c")


def _corner(beat: MedianBeat, places: Mapping[str, float]) -> float | None:
    """The corner of the slope from a (or R) to x: the point farthest above the straight line between them."""
    start, stop = places.get("a", 0.0), places["x"]
    time, trace = beat.time_s, beat.trace_mmhg
    inside = np.flatnonzero((time >= start) & (time <= stop))
    if len(inside) < 3:
        return None
    share = (time[inside] - start) / (stop - start)
    above = trace[inside] - (trace[inside[0]] + (trace[inside[-1]] - trace[inside[0]]) * share)
    above[(time[inside] < 0.03) | (time[inside] > stop - 0.04)] = -np.inf
    k = int(np.argmax(above))
    return float(time[inside[k]]) if above[k] > 0.08 * beat.span_mmhg else None


def _h(beat: MedianBeat, peaks: NDArray[np.int64], places: Mapping[str, float]) -> dict[str, float]:
    """The wave of mid-diastole, where there is room for one between y and the next a."""
    if "y" not in places:
        return {}
    y, next_a = places["y"], beat.interval_s + min(places.get("a", -0.1), 0.0)
    time = beat.time_s[peaks]
    inside = peaks[(time > y + 0.10) & (time < next_a - 0.14)]
    if next_a - y < 0.35 or not len(inside):
        return {}
    score = beat.trace_mmhg[inside] / beat.span_mmhg - 0.5 * ((beat.time_s[inside] - y - 0.2) / 0.12) ** 2
    return {"h": float(beat.time_s[inside[np.argmax(score)]])}
