"""What is true of a simulated record: where each wave stands on the noise-free trace after the line, and what the heart did.

A wave's place is looked for where its mechanics put it (after the atrium's or the ventricle's activation, between the closing and the
opening of the tricuspid valve), moved by the line's delay; it is an extremum there, or the wave is listed as fused, without a place.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import signal

from caval.model.circulation import Haemodynamics
from caval.model.rhythm import Rhythm
from caval.stages._signal import refine
from caval.tables import overlaps
from caval.vocabulary import SPANS

__all__ = ["beat_truth", "wave_truth"]

Floats = NDArray[np.float64]

_PROMINENCE_WINDOW_S = 0.6
_LEAST_MMHG = 0.02
"""An extremum lower than this is none: the integrator's own ripple is a hundred times smaller."""
_TENSION_S = 0.11
"""From the onset of P to an atrial tension half developed."""
_EARLIEST_A_S = 0.065
"""From the onset of P to the earliest top of an a; in a fast heart the v of the beat before stands just before that."""
_NO_A_S = 0.15
"""From the onset of P to where an a without a top of its own has long begun."""
_BEFORE_C_S = 0.045
"""From R to the earliest c."""
_SHUT = 0.1
"""Opening of the tricuspid valve, 0 to 1, below which a contraction in systole meets a shut one."""


@dataclass(frozen=True, eq=False)
class _Extrema:
    time: Floats
    height: Floats
    prominence: Floats

    @classmethod
    def of(cls, trace: Floats, rate: float, sign: float) -> _Extrema:
        index, _ = signal.find_peaks(sign * trace, plateau_size=(1, round(0.2 * rate)))
        window = round(_PROMINENCE_WINDOW_S * rate) | 1
        prominence = signal.peak_prominences(sign * trace, index, wlen=window)[0] if len(index) else np.empty(0)
        keep = prominence >= _LEAST_MMHG
        index = index[keep]
        return cls(refine(sign * trace, index) / rate, sign * trace[index], prominence[keep])

    def highest(self, start_s: Floats, stop_s: Floats, but: NDArray[np.int64] | None = None) -> NDArray[np.int64]:
        """Index of the highest extremum of each interval, -1 where there is none; those of `but` do not count."""
        height = self.height.copy()
        if but is not None:
            height[but] = -np.inf
        first, last = np.searchsorted(self.time, start_s), np.searchsorted(self.time, stop_s)
        best = [a + int(np.argmax(height[a:b])) if b > a else -1 for a, b in zip(first, last, strict=True)]
        return np.array([k if k >= 0 and np.isfinite(height[k]) else -1 for k in best], dtype=np.int64)


def wave_truth(
    trace: Floats, rate: float, delay_s: float, rhythm: Rhythm, heart: Haemodynamics, *, spans: pd.DataFrame | None = None
) -> pd.DataFrame:
    """Marks of a noise-free trace.

    Parameters
    ----------
    trace : float64 array, shape (n,)
        Venous pressure after the line, mmHg, at `rate` Hz.
    delay_s : float
        Delay of slow waves through the line.
    rhythm, heart
        What drove it, on the clock of the vessel.
    spans : DataFrame, optional
        ``onset_s, duration_s, kind, …``: what happened to this trace, on the recorded clock. Inside a span that carries no marks
        (`caval.vocabulary.SPANS`) no wave has a place.

    Returns
    -------
    DataFrame
        ``time_s, mark, beat, pressure_mmhg, prominence_mmhg, state, detail``: state ``clear``; ``fused``, with NaN, for what has no
        extremum; ``unusable``, with NaN, for what stands, or would be looked for, inside a span. `beat` counts the R times from 0; an a
        belongs to the R that follows it. `detail` is ``cannon`` for an a
        on a tricuspid valve that systole keeps shut.
    """
    peaks, troughs = (_Extrema.of(trace, rate, sign) for sign in (1.0, -1.0))
    r = rhythm.r_times_s
    following = np.append(r[1:], np.inf)
    opening = _opening(r, following, heart)
    r_seen, opens = r + delay_s, opening + delay_s
    tallest = _time(peaks, peaks.highest(r_seen + 0.20, opens + 0.06))
    c = peaks.highest(r_seen + _BEFORE_C_S, np.fmin(r_seen + 0.15, tallest - 0.02))
    c_time = _time(peaks, c)  # 50 to 100 ms after R; before that the line still rings after a steep a
    a_rows, taken = _atrial(peaks, rhythm, delay_s, opening, heart, c)
    v = peaks.highest(r_seen + 0.20, opens + 0.06, but=taken)  # one peak cannot be both: the atrium's is its own
    v_time = _time(peaks, v)
    of_p = np.full(len(rhythm.p_times_s) + 1, np.nan)  # one more for "no P follows", and NaN for a P without an R after it
    of_p[: len(a_rows)] = a_rows["time_s"]
    a_times = of_p[np.searchsorted(rhythm.p_times_s, opening)]
    a_next = np.where(np.isnan(a_times), _next(rhythm.p_times_s, opening) + delay_s + _NO_A_S, a_times)  # y comes before the next a
    x = troughs.highest(np.where(np.isnan(c_time), r_seen + 0.05, c_time), np.where(np.isnan(v_time), opens, v_time))
    y = troughs.highest(np.fmax(v_time, opens - 0.02), np.fmin(np.fmin(opens + 0.35, a_next), following + delay_s + _BEFORE_C_S))
    rows = [
        _rows("v", v, peaks, r, 1.0, opens), _rows("x", x, troughs, r, -1.0, r_seen + 0.22), _rows("y", y, troughs, r, -1.0, opens + 0.08),
    ]
    c = np.where(np.isin(c, taken), -1, c)
    rows += [_rows("c", c, peaks, r, 1.0, r_seen + 0.08), a_rows]
    marks = pd.concat(rows, ignore_index=True)
    inside = marks["time_s"].isna() | marks["time_s"].between(0, len(trace) / rate)
    if spans is not None:
        marks = _without(marks, spans)
    return marks[inside].drop(columns="expected_s").sort_values(["beat", "time_s"], kind="stable", ignore_index=True)


def _without(marks: pd.DataFrame, spans: pd.DataFrame) -> pd.DataFrame:
    """The marks, those inside an unusable span without a place."""
    bad = spans[~spans["kind"].isin([kind for kind, term in SPANS.items() if not term.unusable])]
    place = marks["time_s"].fillna(marks["expected_s"]).to_numpy(float)
    hit = overlaps(place, place, bad) >= 0
    return marks.assign(
        state=np.where(hit, "unusable", marks["state"]),
        **{name: np.where(hit, np.nan, marks[name].to_numpy(float)) for name in ("time_s", "pressure_mmhg", "prominence_mmhg")},
    )


def _opening(r: Floats, following: Floats, heart: Haemodynamics) -> Floats:
    """When the tricuspid valve opens after each R: the ventricle's pressure falls below the atrium's, not before 0.2 s."""
    over = heart.pressures["ra"] > heart.pressures["rv"]
    rising = np.flatnonzero(over[1:] & ~over[:-1]) + 1
    times = rising / heart.rate
    index = np.searchsorted(times, r + 0.20)
    found = np.append(times, np.inf)[index]
    return np.where(found < following + 0.1, found, r + 0.40)


def _next(times: Floats, after: Floats) -> Floats:
    return np.append(times, np.inf)[np.searchsorted(times, after)]


def _time(extrema: _Extrema, index: NDArray[np.int64]) -> Floats:
    return np.append(extrema.time, np.nan)[index]


def _rows(mark: str, index: NDArray[np.int64], extrema: _Extrema, r: Floats, sign: float, expected_s: Floats) -> pd.DataFrame:
    blank = np.nan
    return pd.DataFrame(
        {
            "time_s": _time(extrema, index),
            "mark": mark,
            "beat": np.arange(len(r)),
            "pressure_mmhg": sign * np.append(extrema.height, blank)[index],
            "prominence_mmhg": np.append(extrema.prominence, blank)[index],
            "state": np.where(index >= 0, "clear", "fused"),
            "detail": "",
            "expected_s": expected_s,
        }
    )


def _atrial(
    peaks: _Extrema, rhythm: Rhythm, delay_s: float, opening: Floats, heart: Haemodynamics, c: NDArray[np.int64]
) -> tuple[pd.DataFrame, NDArray[np.int64]]:
    """The a of every P that has an R after it, and the peaks they stand on."""
    r, p = rhythm.r_times_s, rhythm.p_times_s
    beat = np.searchsorted(r, p)
    p, beat = p[beat < len(r)], beat[beat < len(r)]
    first, last = p + delay_s + _EARLIEST_A_S, p + delay_s + 0.20
    index = peaks.highest(first, last)
    tense, valve = p + _TENSION_S, heart.openings["tricuspid"]
    systole = tense < np.append(opening, -np.inf)[np.searchsorted(r, tense) - 1]  # of the R before; the last place is for none
    shut = systole & (valve[np.clip(np.rint(tense * heart.rate).astype(np.int64), 0, len(valve) - 1)] < _SHUT)
    shared = (index >= 0) & np.isin(index, c) & ~shut
    own = peaks.highest(first, np.where(shared, _time(peaks, index) - 0.001, last))  # in a fast heart the taller c follows soon
    index = np.where(shared & ((own >= 0) | (_time(peaks, index) > p + delay_s + 0.16)), own, index)
    rows = _rows("a", index, peaks, p, 1.0, p + delay_s + 0.09)
    rows["beat"] = beat
    rows["detail"] = np.where(shut, "cannon", "")
    return rows, index[index >= 0]


def beat_truth(rhythm: Rhythm, heart: Haemodynamics) -> pd.DataFrame:
    """A row a beat of what the heart did.

    Columns: ``beat, r_time_s, kind, p_time_s`` (of the P conducted to it, else NaN), ``stroke_volume_ml`` (right ventricle, forward),
    ``regurgitant_ml`` (tricuspid), ``ra_volume_max_ml, ra_volume_min_ml, ra_compliance_ml_per_mmhg`` (of the resting wall),
    ``rv_volume_max_ml, rv_volume_min_ml``. NaN for the last beat, whose cycle has no end.
    """
    r = rhythm.r_times_s
    p_of = np.full(len(r), np.nan)
    led = rhythm.p_conducted >= 0
    p_of[rhythm.p_conducted[led]] = rhythm.p_times_s[led]
    edges = np.clip(np.rint(r * heart.rate).astype(np.int64), 0, len(heart.time_s) - 1)
    forward = np.maximum(heart.flows["pulmonary"], 0.0)
    back = np.maximum(-heart.flows["tricuspid"], 0.0)
    rows: dict[str, object] = {"beat": np.arange(len(r)), "r_time_s": r, "kind": rhythm.r_kind, "p_time_s": p_of}
    for name, values, reduce in (
        ("stroke_volume_ml", forward, np.add), ("regurgitant_ml", back, np.add),
        ("ra_volume_max_ml", heart.volumes["ra"], np.maximum), ("ra_volume_min_ml", heart.volumes["ra"], np.minimum),
        ("rv_volume_max_ml", heart.volumes["rv"], np.maximum), ("rv_volume_min_ml", heart.volumes["rv"], np.minimum),
        ("ra_compliance_ml_per_mmhg", heart.ra_compliance, np.maximum),
    ):
        column = np.full(len(r), np.nan)
        if len(r) > 1:
            reduced = reduce.reduceat(values, edges)[:-1].astype(float)
            column[:-1] = reduced / heart.rate if reduce is np.add else reduced
        rows[name] = column
    return pd.DataFrame(rows)
