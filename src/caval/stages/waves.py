"""The a, z, c, x, v, y and h of every beat.

A running picture of the cardiac cycle (the median of the R-aligned beats of the two minutes around, on a fixed grid) says where each wave
is to be expected; the single beat decides. The a is sought after its P, wherever that falls, and before R where no P is known. A mark
stands on an extremum of the beat's own trace; where c has run into the slope between a and x it is the corner of that slope and called
fused, as an a that has run into c, and a v that a cannon wave hides; where nothing is, nothing is marked.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import ndimage, signal

from caval import tables
from caval.recording import Signal
from caval.registry import stage
from caval.stages._confidence import confidence
from caval.stages._picture import Picture, running_pictures
from caval.stages._signal import fill, lowpass, moving_mean, nearest, refine, uneven
from caval.stages._usable import usable_beats
from caval.vocabulary import WAVES

__all__ = ["waves"]

Floats = NDArray[np.float64]

_REACH_S = {"a": 0.045, "c": 0.028, "x": 0.045, "v": 0.050, "y": 0.055, "h": 0.070}
"""Spread (SD) allowed to a wave around its place in the picture; it is sought within 2.5 of it."""
_REACH_AFTER_P_S = 0.032
_HIDDEN_P, _REACH_AFTER_HIDDEN_P_S = 0.6, 0.055
"""Confidence up to which a P was not seen but placed by pace, and the reach for the a after it."""
_HEIGHT = {"x": 5.0}
_HEIGHT_USUAL, _HEIGHT_AFTER_P = 2.5, 1.0
"""What standing out by the picture's height is worth against distance from the place: most for x, by definition the deepest point, least
for an a whose P is known."""
_FARTHEST_S = 75.0
"""A picture farther than this from a beat says nothing about it."""
_FALL_S, _FALL_SHARE, _RIPPLE_SHARE = 0.2, 0.5, 0.1
"""A bump this soon after an a, lower than that by a share of the picture's height, and itself as low, is a ripple on the fall of the a."""
_LEAN_S, _LEAN_INTERVAL_S = 0.12, 0.6
"""In a fast heart, a and c this close may have one peak between them."""
_DEEPER_S, _DEEPER_SHARE = 0.12, 0.01
"""A nadir near the one that the picture favours is the one when it is deeper by this share of the picture's height."""
_P_TO_A_S, _LATEST_S = 0.090, 0.08
"""From P to a at the heart (0.08 to 0.10 s, from memory), and the longest delay that z is read with."""
_EARLY = 0.8
"""Share of the usual interval below which a beat is early: its P, if it has one, is not where it usually is."""
_FEW_BEATS = 4
"""Beats either way that tell whether P and evenness are lost."""
_LATEST_CANNON_S = 0.25
_INTO_NEXT_S = 0.12
"""How far past the next R v and y may stand: in a fast heart, through a line, they do."""
_PROMINENCE_WINDOW_S = 0.5
_QUIET_MMHG, _LOUD_MMHG = 0.10, 0.20
"""Noise of the samples up to which a stretch is read off the finer trace, and from which off the smoother one."""
_SHARPEN_S = 0.024
_NOISE_STEP_S, _NOISE_CELL_S = 0.008, 10.0
_WEAK_MMHG = 0.12
"""An extremum lower than this, or than twice the noise, is weak."""


@stage(name="waves", gives=("marks",), margin_s=150.0)
def waves(
    cvp: Signal,
    beats: pd.DataFrame,
    spans: pd.DataFrame,
    atria: pd.DataFrame | None = None,
    coupling: pd.DataFrame | None = None,
    *,
    smooth_hz: float = 12.0,
    fine_hz: float = 20.0,
    delay_s: float = 0.03,
) -> pd.DataFrame:
    """Mark the waves of every usable beat.

    Parameters
    ----------
    cvp : Signal
        Venous pressure, mmHg.
    beats, spans : DataFrame
        As the anchors and quality stages give them.
    atria, coupling : DataFrame, optional
        P waves, and what the ECG shows of the atria of each beat, as the atrial stage gives them. Without them a is sought at a fixed place
        before R.
    smooth_hz : float
        Broad waves (x, v, y, h), and all where the trace is noisy, are found after a zero-phase low-pass at this frequency.
    fine_hz : float
        Where the noise allows it, narrow waves (a, c) are found, and all are placed, on the trace low-passed at this higher frequency.
    delay_s : float
        Line and monitor delay with which z is read when there is no foot between a and c and no P to tell it: the pressure at R plus this.

    Returns
    -------
    DataFrame
        ``time_s, mark, beat, pressure_mmhg, confidence, state``, in time order. Times are those of the channel as recorded; pressures
        are those of the low-passed trace. An a has the number of the R that follows its P; several may stand between two R.
    """
    if not len(beats) or len(cvp) < 2 * cvp.sampling_rate:
        return tables.empty("marks")
    values, missing = fill(cvp.values)
    if missing.all():
        return tables.empty("marks")
    smooth, read = _traces(cvp, values, smooth_hz, fine_hz)
    usable, _ = usable_beats(cvp, beats, spans)
    pictures = running_pictures(read, beats, usable, atria, coupling)
    if not pictures:
        return tables.empty("marks")
    found = _Found(read, beats, usable, pictures)
    sharp = {sign: _Extrema.of(read, sign) for sign in (1.0, -1.0)}
    broad = {sign: _Extrema.of(smooth, sign) for sign in (1.0, -1.0)}
    r, next_r, last = found.r, found.next_r, found.next_r + _INTO_NEXT_S
    found.seek("v", broad[1.0], r + 0.16, last, take=False)
    of_p = found.seek_after_p(sharp[1.0], atria)
    broad[1.0].take_near(of_p.time)  # one extremum carries one mark
    for peaks in (broad[1.0], sharp[1.0]):  # a wave too narrow for the smoother trace may stand on the finer one
        found.seek("v", peaks, r + 0.16, last)
    late_a = found.hide_v(of_p)
    for troughs in (broad[-1.0], sharp[-1.0]):
        found.seek("x", troughs, r + 0.06, np.fmin(found.time("v"), late_a) - 0.03)
        found.seek("y", troughs, np.fmax(found.time("v"), late_a) + 0.04, last)
    found.deepen("y", broad[-1.0], found.time("y") - _DEEPER_S, np.fmin(found.time("y") + _DEEPER_S, last))
    for wave in "vy":
        found.sharpen(wave, sharp[1.0 if WAVES[wave].is_peak else -1.0])
    bounds = np.fmax(r - 0.30, found.before()), np.minimum(r + _LATEST_CANNON_S, found.time("x") - 0.05)
    found.seek("a", sharp[1.0], *bounds, rows=found.without_a(of_p, coupling))
    found.join("a", of_p)
    broad[1.0].take_near(found.time("a"))
    found.seek("c", sharp[1.0], np.fmax(r + 0.02, found.time("a") + 0.04), np.fmin(found.time("x"), found.time("v") - 0.05) - 0.02)
    found.one_of_two()
    found.deepen("x", broad[-1.0], np.fmax(r + 0.06, found.time("c") + 0.02), np.fmin(found.time("v"), late_a) - 0.03)
    found.sharpen("x", sharp[-1.0])
    found.seek("h", broad[1.0], found.time("y") + 0.08, next_r - 0.25)
    found.corner_c()
    found.corner_a()
    found.corner_v(of_p)
    found.foot_z(sharp[-1.0], delay_s)
    return found.table()


def _traces(cvp: Signal, values: Floats, smooth_hz: float, fine_hz: float) -> tuple[Signal, Signal]:
    """The trace on which broad waves are sought, low-passed at `smooth_hz`, and that on which narrow ones are sought and all are read.

    The second is low-passed at `fine_hz` where it is quiet, at `smooth_hz` where it is not, and blended between.
    """
    rate = cvp.sampling_rate
    smooth, fine = lowpass(values, rate, smooth_hz), lowpass(values, rate, fine_hz)
    centres, noise = _noise(cvp, values)
    quiet = np.clip((_LOUD_MMHG - noise) / (_LOUD_MMHG - _QUIET_MMHG), 0.0, 1.0)
    share = np.interp(cvp.start_s + np.arange(len(values)) / rate, centres, quiet)
    traces = (smooth, smooth + share * (fine - smooth))
    broad, narrow = (Signal(trace, rate, cvp.start_s, cvp.label, cvp.unit) for trace in traces)
    return broad, narrow


def _noise(cvp: Signal, values: Floats) -> tuple[Floats, Floats]:
    """Centres of cells of a fixed grid (s) and the SD of the noise in them (mmHg), of samples taken 8 ms apart.

    It is that of their third differences, in which no wave is left.
    """
    step = max(1, round(_NOISE_STEP_S * cvp.sampling_rate))
    first = -round(cvp.start_s * cvp.sampling_rate) % step
    steady = np.abs(np.diff(moving_mean(values, step)[first::step], 3))
    time = cvp.start_s + (first + step * (np.arange(len(steady)) + 1.5)) / cvp.sampling_rate
    cells = np.floor(time / _NOISE_CELL_S).astype(np.int64)
    edges = np.flatnonzero(np.diff(cells, prepend=cells[0] - 1)) if len(cells) else np.empty(0, np.int64)
    noise = np.array([np.median(part) for part in np.split(steady, edges[1:])]) * 1.4826 / 20.0**0.5
    return (cells[edges] + 0.5) * _NOISE_CELL_S, noise


@dataclass(eq=False)
class _Extrema:
    """All peaks, or all troughs, of a trace in time order: time (s), height (sign times mmHg), prominence (mmHg), and which are taken."""

    time: Floats
    height: Floats
    prominence: Floats
    taken: NDArray[np.bool_]

    @classmethod
    def of(cls, smooth: Signal, sign: float) -> _Extrema:
        heights = sign * smooth.values
        window = round(_PROMINENCE_WINDOW_S * smooth.sampling_rate) | 1
        index, _ = signal.find_peaks(heights, plateau_size=(1, window // 2))  # a longer plateau is a stuck trace, no wave
        prominence = signal.peak_prominences(heights, index, wlen=window)[0] if len(index) else np.empty(0)
        time = smooth.start_s + refine(heights, index) / smooth.sampling_rate
        return cls(time, heights[index], prominence, np.zeros(len(index), dtype=bool))

    def nearest(self, time: Floats) -> Floats:
        """Time of the extremum nearest to each time, NaN for NaN."""
        if not len(self.time):
            return np.full(len(time), np.nan)
        return np.where(np.isfinite(time), self.time[nearest(self.time, time)], np.nan)

    def time_near(self, time: Floats) -> Floats:
        """Times of the extrema that lie at some times, as found on the other trace."""
        near = self.nearest(time)
        return near[np.abs(near - time) <= _SHARPEN_S]

    def take_near(self, time: Floats) -> None:
        """Take the extrema that lie at some times, as found on the other trace."""
        self.taken |= np.isin(self.time, self.time_near(time))

    def around(self, start: Floats, most: int = 8) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
        """The `most` extrema from each start on, shape (n, most), and which of these exist and are free."""
        index = np.searchsorted(self.time, start)[:, None] + np.arange(most)
        there = index < len(self.time)
        index = np.minimum(index, max(0, len(self.time) - 1))
        return index, there & ~self.taken[index] if len(self.time) else there


@dataclass(frozen=True, eq=False)
class _Hits:
    """Marks of one kind as columns; `time` (s) is NaN where nothing was found, `rise` is the prominence (mmHg).

    `evidence` is what the confidence is made of, shape (n, 5), see `caval.stages._confidence.design`.
    """

    beat: NDArray[np.int64]
    time: Floats
    rise: Floats
    evidence: Floats
    state: NDArray[np.object_]

    @classmethod
    def none(cls, beat: NDArray[np.int64]) -> _Hits:
        """No mark for each of some beats."""
        nothing = np.full(len(beat), np.nan)
        return cls(beat, nothing, nothing.copy(), np.full((len(beat), 5), np.nan), np.full(len(beat), "clear", dtype=object))

    def only(self, rows: NDArray) -> _Hits:
        return _Hits(*(getattr(self, column.name)[rows] for column in fields(self)))

    def over(self, old: _Hits) -> _Hits:
        """These where there are any, else the old ones."""
        mine = np.isfinite(self.time)
        pairs = [(getattr(self, column.name), getattr(old, column.name)) for column in fields(self)]
        return _Hits(*(np.where(mine if new.ndim == 1 else mine[:, None], new, before) for new, before in pairs))

    def and_(self, more: _Hits) -> _Hits:
        return _Hits(*(np.concatenate([getattr(self, column.name), getattr(more, column.name)]) for column in fields(self)))


class _Found:
    """The waves of all beats, filled wave by wave. Row i of a wave's hits is that of beat i, but an a may have further rows."""

    def __init__(self, read: Signal, beats: pd.DataFrame, usable: NDArray[np.bool_], pictures: list[Picture]) -> None:
        self.read = read
        self.r = beats["r_time_s"].to_numpy(float)
        self.beat = beats["beat"].to_numpy(np.int64)
        self.next_r = np.append(self.r[1:], np.inf)
        self.pictures = pictures
        self.centres = np.array([p.centre_s for p in pictures])
        self.which = self._picture_of(self.r)
        self.usable = usable & (np.abs(self.r - self.centres[self.which]) <= _FARTHEST_S)
        self.noise = np.array([p.noise_mmhg for p in pictures])
        self.span = np.array([p.span_mmhg for p in pictures])
        self.interval = np.array([p.interval_s for p in pictures])
        self.hits: dict[str, _Hits] = {}
        self.guessed: set[str] = set()
        self.of_beat: dict[str, Floats] = {}

    def _picture_of(self, time: Floats) -> NDArray[np.int64]:
        """The nearest picture's index, of two equally near the earlier."""
        right = np.clip(np.searchsorted(self.centres, time), 1, max(1, len(self.centres) - 1))
        right = np.minimum(right, len(self.centres) - 1)
        left = np.maximum(right - 1, 0)
        return np.where(np.abs(time - self.centres[left]) <= np.abs(time - self.centres[right]), left, right)

    def time(self, wave: str) -> Floats:
        """Time of the wave of each beat, s, NaN where it was not found."""
        return self.of_beat[wave]

    def before(self) -> Floats:
        """Where the waves of the beat before end, s: its y, else its v; NaN where neither was found."""
        last = np.fmax(self.time("y"), self.time("v") + 0.05)
        return np.concatenate([[np.nan], last[:-1]])

    def seek(
        self,
        wave: str,
        extrema: _Extrema,
        earliest: Floats,
        latest: Floats,
        rows: NDArray[np.bool_] | None = None,
        *,
        take: bool = True,
    ) -> None:
        """Find a wave, of the beats that have none yet, near its place in the picture, between two bounds; NaN bounds do not bind.

        Without `take` it is a first guess, and the extremum stays free.
        """
        place = self.place(wave)
        sought = self.usable if rows is None else self.usable & rows
        old = self.hits.get(wave) if take and wave not in self.guessed else None
        if old is not None:
            sought = sought & np.isnan(old.time)
        weigh = np.full(len(place), _REACH_S[wave]), _HEIGHT.get(wave, _HEIGHT_USUAL)
        free = extrema.taken.copy()
        hits = self._choose(extrema, np.where(sought, place, np.nan), weigh, earliest, latest, self.which, self.beat)
        if not take:
            extrema.taken = free
            self.guessed.add(wave)
        else:
            self.guessed.discard(wave)
        self.hits[wave] = hits if old is None else hits.over(old)
        self.of_beat[wave] = self.hits[wave].time.copy()

    def seek_after_p(self, peaks: _Extrema, atria: pd.DataFrame | None) -> _Hits:
        """The a after each P that the ECG shows or the pace of the atria places."""
        if atria is None or not len(atria):
            return _Hits.none(self.beat[:0])
        p = atria["time_s"].to_numpy(float)
        which = self._picture_of(p)
        place = p + np.array([picture.p_to_a_s for picture in self.pictures])[which]
        follows = np.searchsorted(self.beat, atria["beat"].to_numpy(np.int64))
        within = np.searchsorted(self.r, np.nan_to_num(place)) - 1
        known = follows < len(self.r)
        sound = known & self.usable[np.minimum(follows, len(self.r) - 1)] & self.usable[np.maximum(within, 0)]
        sound &= np.abs(p - self.centres[which]) <= _FARTHEST_S
        seen = atria["confidence"].to_numpy(float) > _HIDDEN_P
        weigh = np.where(seen, _REACH_AFTER_P_S, _REACH_AFTER_HIDDEN_P_S), np.where(seen, _HEIGHT_AFTER_P, _HEIGHT_USUAL)
        beat = self.beat[np.minimum(follows, len(self.r) - 1)]
        unbound = np.full(len(p), np.nan)
        return self._choose(peaks, np.where(sound, place, np.nan), weigh, unbound, unbound, which, beat, self.time("v"))

    def deepen(self, wave: str, troughs: _Extrema, earliest: Floats, latest: Floats) -> None:
        """Move a nadir to the deepest free trough between two bounds, where that is deeper beyond doubt."""
        hits = self.hits[wave]
        index, free = troughs.around(np.where(np.isfinite(hits.time), earliest, np.inf))
        if not len(troughs.time):
            return
        inside = free & (troughs.time[index] <= latest[:, None])
        depth = np.where(inside, troughs.height[index], -np.inf)
        rows = np.arange(len(depth))
        best = index[rows, depth.argmax(axis=1)]
        margin = np.fmax(_DEEPER_SHARE * self.span, 0.5 * _WEAK_MMHG)[self.which]
        deeper = np.isfinite(hits.time) & (depth.max(axis=1) > -self.read.at(hits.time) + margin)
        hits.time[deeper] = self.of_beat[wave][deeper] = troughs.time[best[deeper]]
        hits.rise[deeper] = troughs.prominence[best[deeper]]

    def hide_v(self, of_p: _Hits) -> Floats:
        """Take back each v that is a ripple on the fall of an a of late systole, which hides it; time of that a, NaN without one."""
        v, a = self.time("v"), np.sort(of_p.time[np.isfinite(of_p.time)])
        if not len(a):
            return np.full(len(v), np.nan)
        before = np.append(a, np.nan)[np.searchsorted(a, v) - 1]
        height = [self.read.at(t) for t in (before, v)]
        span = self.span[self.which]
        ripple = (height[0] - height[1] > _FALL_SHARE * span) & (self.hits["v"].rise < _RIPPLE_SHARE * span)
        hidden = (v - before < _FALL_S) & (before > self.r + 0.16) & ripple
        v[hidden] = self.hits["v"].time[hidden] = np.nan
        return np.where(hidden, before, np.nan)

    def without_a(self, of_p: _Hits, coupling: pd.DataFrame | None) -> NDArray[np.bool_]:
        """Beats whose a is sought at a fixed place from R, where the picture has one: those that come in time and have none after a P.

        A lead may hide the P of a beat; the pressure decides whether there is an a. But where beats have lost their P and their evenness,
        as when fibrillation begins, the picture is still that of the rhythm before and says nothing of them.
        """
        in_time = ~(np.diff(self.r, prepend=np.nan) < _EARLY * self.interval[self.which])
        lacking = in_time & ~np.isin(self.beat, of_p.beat[np.isfinite(of_p.time)])
        if coupling is None or not len(coupling):
            return lacking
        state = pd.Series(self.beat).map(coupling.set_index("beat")["p"]).to_numpy(object)
        gone = ndimage.uniform_filter1d((state == "absent").astype(float), 2 * _FEW_BEATS + 1, mode="nearest") > 0.5
        return lacking & ~(gone & uneven(self.r, 2 * _FEW_BEATS + 1))

    def join(self, wave: str, more: _Hits) -> None:
        """Add marks to those of a wave; the last before R stands for the beat."""
        found = more.only(np.isfinite(more.time))
        mine = self.hits[wave]
        row = np.searchsorted(self.beat, found.beat)
        self.of_beat[wave][row] = np.fmax(found.time, self.of_beat[wave][row])  # rows in time order: the last assignment is the latest
        self.hits[wave] = mine.only(np.isfinite(mine.time)).and_(found)

    def _choose(
        self,
        extrema: _Extrema,
        place: Floats,
        weigh: tuple[Floats, Floats | float],
        earliest: Floats,
        latest: Floats,
        which: NDArray,
        beat: NDArray,
        others: Floats | None = None,
    ) -> _Hits:
        """Of the free extrema within 2.5 of the reach of each place and within the bounds, the one that stands out most and lies nearest.

        `weigh` are that reach (s) and the worth of height. An extremum that is likely another wave's, at one of the times of `others`, is
        only chosen within one reach.
        """
        reach, worth = weigh
        span, noise = self.span[which], self.noise[which]
        low, high = np.fmax(place - 2.5 * reach, earliest), np.fmin(place + 2.5 * reach, latest)
        sought = np.isfinite(place) & (low < high)
        if not len(extrema.time):
            return _Hits.none(beat)
        index, free = extrema.around(np.where(sought, low, np.inf))
        time, height, prominence = (c[index] for c in (extrema.time, extrema.height, extrema.prominence))
        inside = free & (time <= np.where(sought, high, -np.inf)[:, None])
        off = (time - place[:, None]) / reach[:, None]
        if others is not None:
            theirs = np.isin(extrema.time, extrema.time_near(others))[index]
            inside &= ~theirs | (np.abs(off) < 2.0)
        stands = np.minimum(prominence / (0.3 * span[:, None]), 1.0)
        score = np.where(inside, stands + np.broadcast_to(worth, len(place))[:, None] * height / span[:, None] - 0.5 * off**2, -np.inf)
        rows = np.arange(len(place))
        best = score.argmax(axis=1)
        hit = inside[rows, best]
        hit &= _first(index[rows, best], score[rows, best], hit)
        extrema.taken[index[rows, best][hit]] = True
        rise = prominence[rows, best]
        weak = rise < np.maximum(_WEAK_MMHG, 2.0 * noise)
        second = np.where(np.arange(score.shape[1]) == best[:, None], -np.inf, score).max(axis=1)
        lead = np.where(hit, score[rows, best], 0.0) - np.where(np.isfinite(second), second, -np.inf)
        evidence = np.column_stack([rise / (noise + 0.02), off[rows, best], lead, self.interval[which], rise / span])
        return _Hits(beat, np.where(hit, time[rows, best], np.nan), rise, evidence, np.where(weak, "weak", "clear").astype(object))

    def one_of_two(self) -> None:
        """Where a and c have one peak between them, it is the one whose place is nearer."""
        a, c, hits = self.time("a"), self.hits["c"], self.hits["a"]
        place = {wave: self.place(wave) for wave in "ac"}
        fast = self.interval[self.which] < _LEAN_INTERVAL_S
        close = fast & (np.abs(place["c"] - place["a"]) < _LEAN_S)
        rows = np.flatnonzero(np.isnan(c.time) & close & (np.abs(a - place["c"]) < np.abs(a - place["a"])))
        if not len(rows):
            return
        order = np.argsort(hits.time)
        at = order[np.searchsorted(hits.time, a[rows], sorter=order)]
        for column in ("time", "rise", "state", "evidence"):
            getattr(c, column)[rows] = getattr(hits, column)[at]
        self.of_beat["c"][rows], self.of_beat["a"][rows], hits.time[at] = a[rows], np.nan, np.nan

    def sharpen(self, wave: str, sharp: _Extrema) -> None:
        """Move a broad wave to the free extremum of the finer trace nearest to it, 24 ms at most.

        A wave with one steep side, such as v, has its top nearer to that side than the smoother trace shows.
        """
        time = self.hits[wave].time
        near = sharp.nearest(time)
        close = np.abs(near - time) <= _SHARPEN_S
        time[close] = self.of_beat[wave][close] = near[close]
        sharp.taken |= np.isin(sharp.time, near[close])

    def place(self, wave: str) -> Floats:
        """Where the picture has the wave of each beat, s; NaN where it has none."""
        return self.r + np.array([p.places.get(wave, np.nan) for p in self.pictures])[self.which]

    def corner_c(self) -> None:
        """Where c has no peak between a and x but the picture has c: the corner of the slope between them."""
        rows = self.usable & np.isnan(self.hits["c"].time)
        at, time = self._corner(rows, self.time("a"), self.time("x"), self.place("c"), 0.05)
        hits = self.hits["c"]
        hits.time[at], hits.state[at], hits.evidence[at] = time, "fused", np.nan
        self.of_beat["c"][at] = time

    def corner_a(self) -> None:
        """Where a fast heart has a P and no peak of a before c: the corner of the slope from the y before to c.

        P to a takes as long as R to c, within the spread of either, so a is expected as long before c as P is before R.
        """
        rows = self.usable & np.isnan(self.time("a")) & (self.interval[self.which] < _LEAN_INTERVAL_S)
        expected = self.time("c") - np.array([p.pr_s for p in self.pictures])[self.which]
        start = np.fmax(self.before(), self.time("c") - 0.25)
        place = np.where(np.isfinite(self.place("a")), self.place("a"), expected)
        at, time = self._corner(rows, start, self.time("c"), place, 0.03)
        found = _Hits.none(self.beat[at])
        found.time[:], found.state[:] = time, "fused"
        self.join("a", found)

    def corner_v(self, of_p: _Hits) -> None:
        """Where a cannon a of late systole hides v: the corner of the slope from it to y."""
        a = np.append(np.sort(of_p.time[np.isfinite(of_p.time)]), np.inf)
        start = a[np.searchsorted(a, self.r + 0.16)]
        rows = self.usable & np.isnan(self.hits["v"].time) & (start < self.time("y"))
        at, time = self._corner(rows, np.where(np.isfinite(start), start, np.nan), self.time("y"), self.place("v"), 0.02, reach_s=0.15)
        hits = self.hits["v"]
        hits.time[at], hits.state[at], hits.evidence[at] = time, "fused", np.nan
        self.of_beat["v"][at] = time

    def _corner(
        self, rows: NDArray[np.bool_], start: Floats, stop: Floats, place: Floats, least: float, *, reach_s: float = 2.5 * _REACH_S["c"]
    ) -> tuple[NDArray[np.int64], Floats]:
        """Beats, and in each the point within reach of a place that lies farthest above the straight line from start to stop.

        Only those that lie above it by a share of the picture's height.
        """
        at = np.flatnonzero(rows & np.isfinite(start) & np.isfinite(stop) & np.isfinite(place) & (start < stop))
        if not len(at):
            return at, np.empty(0)
        share = np.linspace(0.0, 1.0, 41)
        time = start[at, None] + (stop - start)[at, None] * share
        level = self.read.at(time)
        above = level - (level[:, :1] + (level[:, -1:] - level[:, :1]) * share)
        above[np.abs(time - place[at, None]) > reach_s] = -np.inf
        best = above.argmax(axis=1)
        height = above[np.arange(len(at)), best]
        good = np.isfinite(height) & (height > least * self.span[self.which][at])
        return at[good], time[np.arange(len(at)), best][good]

    def foot_z(self, troughs: _Extrema, delay_s: float) -> None:
        """The lowest point between a and c; without one, the pressure at R plus the delay, called fused.

        The delay is what P to a takes longer than at the heart, where P is known.
        """
        a, c, noise = self.time("a"), self.time("c"), self.noise[self.which]
        own_peak = self.hits["c"].state != "fused"
        first = np.searchsorted(troughs.time, np.where(np.isfinite(a), a, np.inf))
        foot = np.append(troughs.time, np.nan)[first]
        prominence = np.append(troughs.prominence, np.nan)[first]
        has = self.usable & own_peak & (foot > a) & (foot < c)
        late = np.array([p.p_to_a_s for p in self.pictures])[self.which] - _P_TO_A_S
        at_r = self.r + np.where(np.isfinite(late), np.clip(late, 0.0, _LATEST_S), delay_s)
        readable = self.usable & np.isfinite(self.read.at(at_r)) & ~(at_r <= a) & ~(at_r >= c)  # the base of c lies before it
        weak = prominence < np.maximum(_WEAK_MMHG, 2.0 * noise)
        state = np.where(has, np.where(weak, "weak", "clear"), "fused").astype(object)
        evidence = np.where(has[:, None], self.hits["c"].evidence, np.nan)  # a foot is as sure as the c it is the foot of
        self.hits["z"] = _Hits(self.beat, np.where(has, foot, np.where(readable, at_r, np.nan)), prominence, evidence, state)

    def table(self) -> pd.DataFrame:
        """The marks table."""
        parts = []
        for wave, every in self.hits.items():
            hits = every.only(np.isfinite(every.time))
            sure = confidence("c" if wave == "z" else wave, hits.evidence)
            columns = {"beat": hits.beat, "pressure_mmhg": self.read.at(hits.time), "confidence": sure, "state": hits.state}
            parts.append(pd.DataFrame({"time_s": hits.time, "mark": wave, **columns}))
        marks = pd.concat(parts, ignore_index=True)
        return marks.sort_values(["time_s", "mark"], kind="stable", ignore_index=True)


def _first(index: NDArray[np.int64], score: Floats, hit: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Which hits keep their extremum when several chose the same: the one with the best score."""
    order = np.lexsort((-score, np.where(hit, index, -1)))
    ordered = np.where(hit, index, -1)[order]
    keep = np.zeros(len(index), dtype=bool)
    keep[order] = np.diff(ordered, prepend=-2) != 0
    return keep & hit
