"""The a, z, c, x, v, y and h of every beat.

A running picture of the cardiac cycle (the median of the R-aligned beats of the two minutes around, on a fixed grid) says where each wave
is to be expected; the single beat decides. A mark stands on an extremum of the beat's own trace; where c has run into the slope
between a and x it is the corner of that slope and called fused; where nothing is, nothing is marked.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import signal

from caval import tables
from caval.recording import Signal
from caval.registry import stage
from caval.stages._picture import Picture, running_pictures
from caval.stages._signal import cut, fill, lowpass, refine
from caval.stages._usable import usable_beats
from caval.vocabulary import WAVES

__all__ = ["waves"]

Floats = NDArray[np.float64]

_REACH_S = {"a": 0.045, "c": 0.028, "x": 0.045, "v": 0.050, "y": 0.055, "h": 0.070}
"""Spread (SD) allowed to a wave around its place in the picture; it is sought within 2.5 of it."""
_FARTHEST_S = 75.0
"""A picture farther than this from a beat says nothing about it."""
_FAST_S = 0.5
_TOGETHER_S = 0.10
_PROMINENCE_WINDOW_S = 0.5
_SHARPEN_S = 0.024
_QUIET_MMHG = 0.15
"""Noise of the samples (from their third differences, in which no wave is left) up to which a beat is read off the finer trace."""
_WEAK_MMHG = 0.12
"""An extremum lower than this, or than twice the noise, is weak."""


@stage(name="waves", gives=("marks",), margin_s=150.0)
def waves(
    cvp: Signal, beats: pd.DataFrame, spans: pd.DataFrame, *, smooth_hz: float = 12.0, fine_hz: float = 20.0, delay_s: float = 0.03
) -> pd.DataFrame:
    """Mark the waves of every usable beat.

    Parameters
    ----------
    cvp : Signal
        Venous pressure, mmHg.
    beats, spans : DataFrame
        As the anchors and quality stages give them.
    smooth_hz : float
        Waves are found after a zero-phase low-pass at this frequency.
    fine_hz : float
        Where the beat's noise allows it, the place of an extremum is that on the trace low-passed at this higher frequency: a wave with
        one steep side, such as v, has its top nearer to that side than the smoother trace shows.
    delay_s : float
        Line and monitor delay with which z is read when there is no foot between a and c: the pressure at R plus this.

    Returns
    -------
    DataFrame
        ``time_s, mark, beat, pressure_mmhg, confidence, state``, in time order. Times are those of the channel as recorded; pressures
        are those of the low-passed trace.
    """
    if not len(beats) or len(cvp) < 2 * cvp.sampling_rate:
        return tables.empty("marks")
    values, missing = fill(cvp.values)
    if missing.all():
        return tables.empty("marks")
    smooth = Signal(lowpass(values, cvp.sampling_rate, smooth_hz), cvp.sampling_rate, cvp.start_s, cvp.label, cvp.unit)
    usable, _ = usable_beats(cvp, beats, spans)
    pictures = running_pictures(smooth, beats, usable)
    if not pictures:
        return tables.empty("marks")
    fine = Signal(lowpass(values, cvp.sampling_rate, fine_hz), cvp.sampling_rate, cvp.start_s, cvp.label, cvp.unit)
    trace = _Trace.of(smooth)
    found = _Found(beats, usable, pictures)
    found.seek("v", trace.peaks, found.r + 0.20, found.next_r - 0.08)
    found.seek("x", trace.troughs, found.r + 0.08, found.time["v"] - 0.05)
    found.seek("y", trace.troughs, found.time["v"] + 0.04, found.next_r)
    found.seek("a", trace.peaks, np.fmax(found.r - 0.30, found.before()), np.minimum(found.r + 0.10, found.time["x"] - 0.05))
    found.seek("c", trace.peaks, np.fmax(found.r + 0.02, found.time["a"] + 0.04), found.time["x"] - 0.03)
    found.seek("h", trace.peaks, found.time["y"] + 0.08, found.next_r - 0.25)
    found.corner_c(smooth)
    found.fuse_a(smooth)
    found.foot_z(trace, smooth, delay_s)
    found.sharpen(fine, values)
    return found.table(smooth, fine)


@dataclass(frozen=True, eq=False)
class _Extrema:
    """All peaks, or all troughs, of a trace in time order: time (s), height (sign times mmHg), prominence (mmHg)."""

    sign: float
    time: Floats
    height: Floats
    prominence: Floats


@dataclass(frozen=True, eq=False)
class _Trace:
    peaks: _Extrema
    troughs: _Extrema

    @classmethod
    def of(cls, smooth: Signal) -> _Trace:
        return cls(cls._extrema(smooth, 1.0), cls._extrema(smooth, -1.0))

    @staticmethod
    def _extrema(smooth: Signal, sign: float) -> _Extrema:
        heights = sign * smooth.values
        window = round(_PROMINENCE_WINDOW_S * smooth.sampling_rate) | 1
        index, _ = signal.find_peaks(heights, plateau_size=(1, window // 2))  # a longer plateau is a stuck trace, no wave
        prominence = signal.peak_prominences(heights, index, wlen=window)[0] if len(index) else np.empty(0)
        time = smooth.start_s + refine(heights, index) / smooth.sampling_rate
        return _Extrema(sign, time, heights[index], prominence)


class _Found:
    """The waves of all beats as columns, filled wave by wave. Times are NaN where a wave is not found."""

    def __init__(self, beats: pd.DataFrame, usable: NDArray[np.bool_], pictures: list[Picture]) -> None:
        self.r = beats["r_time_s"].to_numpy(float)
        self.beat = beats["beat"].to_numpy(np.int64)
        self.next_r = np.append(self.r[1:], np.inf)
        self.pictures = pictures
        away = np.abs(self.r[:, None] - np.array([p.centre_s for p in pictures]))
        self.which = away.argmin(axis=1)
        self.usable = usable & (away.min(axis=1) <= _FARTHEST_S)
        self.noise = np.array([p.noise_mmhg for p in pictures])[self.which]
        self.span = np.array([p.span_mmhg for p in pictures])[self.which]
        self.fine = np.zeros(len(self.r), dtype=bool)
        self.time: dict[str, Floats] = {}
        self.confidence: dict[str, Floats] = {}
        self.state: dict[str, NDArray[np.object_]] = {}

    def before(self) -> Floats:
        """Where the waves of the beat before end, s: its y, else its v; NaN where neither was found."""
        last = np.fmax(self.time["y"], self.time["v"] + 0.05)
        return np.concatenate([[np.nan], last[:-1]])

    def place(self, wave: str) -> Floats:
        """Where the picture has the wave, seconds of the record, NaN where it has none."""
        return self.r + np.array([p.places.get(wave, np.nan) for p in self.pictures])[self.which]

    def seek(self, wave: str, extrema: _Extrema, earliest: Floats, latest: Floats) -> None:
        """Choose for each beat the extremum that stands out most and lies nearest to the wave's place in the picture.

        NaN bounds (a neighbour that was not found) do not bind.
        """
        reach = _REACH_S[wave]
        place = self.place(wave)
        low = np.fmax(place - 2.5 * reach, earliest)
        high = np.fmin(place + 2.5 * reach, latest)
        sought = self.usable & np.isfinite(place) & (low < high)
        first = np.searchsorted(extrema.time, np.where(sought, low, np.inf))
        index = first[:, None] + np.arange(8)
        inside = index < len(extrema.time)
        index = np.minimum(index, max(0, len(extrema.time) - 1))
        if not len(extrema.time):
            inside[:] = False
            index = np.zeros_like(index)
            time = height = prominence = np.full(index.shape, np.nan)
        else:
            time, height, prominence = (c[index] for c in (extrema.time, extrema.height, extrema.prominence))
        inside &= time <= np.where(sought, high, -np.inf)[:, None]
        off = (time - place[:, None]) / reach
        stands = np.minimum(prominence / (0.3 * self.span[:, None]), 1.0)
        score = np.where(inside, stands + 2.5 * height / self.span[:, None] - 0.5 * off**2, -np.inf)
        best = score.argmax(axis=1)
        rows = np.arange(len(best))
        hit = inside[rows, best]
        self.time[wave] = np.where(hit, time[rows, best], np.nan)
        rise = prominence[rows, best]
        weak = rise < np.maximum(_WEAK_MMHG, 2.0 * self.noise)
        self.state[wave] = np.where(weak, "weak", "clear").astype(object)
        clarity = rise / (rise + 2.0 * self.noise + 0.05)
        self.confidence[wave] = np.where(hit, clarity * np.exp(-0.125 * off[rows, best] ** 2), np.nan)

    def corner_c(self, smooth: Signal) -> None:
        """Where c has no peak between a and x but the picture has c: the corner of the slope, the point farthest above the line a–x."""
        a, x, place = self.time["a"], self.time["x"], self.place("c")
        lack = self.usable & np.isnan(self.time["c"]) & np.isfinite(a) & np.isfinite(x) & np.isfinite(place)
        rows = np.flatnonzero(lack)
        if not len(rows):
            return
        share = np.linspace(0.0, 1.0, 41)
        time = a[rows, None] + (x - a)[rows, None] * share
        level = smooth.at(time)
        above = level - (level[:, :1] + (level[:, -1:] - level[:, :1]) * share)
        above[(np.abs(time - place[rows, None]) > 2.5 * _REACH_S["c"]) | (time < self.r[rows, None] + 0.02)] = -np.inf
        best = above.argmax(axis=1)
        height = above[np.arange(len(rows)), best]
        good = np.isfinite(height) & (height > 0.05 * self.span[rows])
        self.time["c"][rows[good]] = time[np.arange(len(rows)), best][good]
        self.state["c"][rows[good]] = "fused"
        self.confidence["c"][rows[good]] = 0.3

    def fuse_a(self, smooth: Signal) -> None:
        """Call an a fused that runs into c in a fast heart: 0.1 s apart or less, with a dip under a tenth of the beat's height."""
        a, c = self.time["a"], self.time["c"]
        rows = np.flatnonzero((c - a < _TOGETHER_S) & (self.next_r - self.r < _FAST_S))
        if not len(rows):
            return
        level = smooth.at(a[rows, None] + (c - a)[rows, None] * np.linspace(0.0, 1.0, 21))
        dip = np.minimum(level[:, 0], level[:, -1]) - level.min(axis=1)
        self.state["a"][rows[dip < 0.1 * self.span[rows]]] = "fused"

    def foot_z(self, trace: _Trace, smooth: Signal, delay_s: float) -> None:
        """The lowest point between a and c; without one, the pressure at R plus the delay, called fused."""
        a, c = self.time["a"], self.time["c"]
        own_peak = self.state["c"] != "fused"
        first = np.searchsorted(trace.troughs.time, np.where(np.isfinite(a), a, np.inf))
        foot = np.append(trace.troughs.time, np.nan)[first]
        prominence = np.append(trace.troughs.prominence, np.nan)[first]
        has = self.usable & own_peak & (foot > a) & (foot < c)
        at_r = self.r + delay_s
        readable = self.usable & np.isfinite(smooth.at(at_r)) & ~(at_r <= a) & ~(at_r >= c)  # the base of c lies before it
        self.time["z"] = np.where(has, foot, np.where(readable, at_r, np.nan))
        weak = prominence < np.maximum(_WEAK_MMHG, 2.0 * self.noise)
        self.state["z"] = np.where(has, np.where(weak, "weak", "clear"), "fused").astype(object)
        self.confidence["z"] = np.where(has, np.fmin(self.confidence["a"], self.confidence["c"]), 0.5)

    def sharpen(self, fine: Signal, raw: Floats) -> None:
        """Move the extrema of quiet beats to the nearest of the finer trace, 24 ms at most."""
        window = cut(raw, np.rint(fine.position(self.r - 0.3)).astype(int), round(fine.sampling_rate))
        noise = 1.4826 * np.median(np.abs(np.diff(window, 3, axis=1)), axis=1) / 20.0**0.5
        self.fine = noise < _QUIET_MMHG
        of_fine = _Trace.of(fine)
        for wave, time in self.time.items():
            rows = np.flatnonzero(np.isfinite(time) & self.fine & (self.state[wave] != "fused"))
            extrema = of_fine.peaks if WAVES[wave].is_peak else of_fine.troughs
            if not len(rows) or len(extrema.time) < 2:
                continue
            right = np.clip(np.searchsorted(extrema.time, time[rows]), 1, len(extrema.time) - 1)
            near = np.where(time[rows] - extrema.time[right - 1] < extrema.time[right] - time[rows], right - 1, right)
            close = np.abs(extrema.time[near] - time[rows]) <= _SHARPEN_S
            time[rows[close]] = extrema.time[near[close]]

    def table(self, smooth: Signal, fine: Signal) -> pd.DataFrame:
        """The marks table; pressures are those of the trace on which a mark was placed."""
        parts = []
        for wave, time in self.time.items():
            rows = np.flatnonzero(np.isfinite(time))
            on_fine = self.fine[rows] & (self.state[wave][rows] != "fused")
            parts.append(
                pd.DataFrame(
                    {
                        "time_s": time[rows],
                        "mark": wave,
                        "beat": self.beat[rows],
                        "pressure_mmhg": np.where(on_fine, fine.at(time[rows]), smooth.at(time[rows])),
                        "confidence": self.confidence[wave][rows],
                        "state": self.state[wave][rows],
                    }
                )
            )
        marks = pd.concat(parts, ignore_index=True)
        return marks.sort_values(["time_s", "mark"], kind="stable", ignore_index=True)
