"""The waves of all beats while they are being found."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import ndimage

from caval.recording import Signal
from caval.stages._confidence import confidence
from caval.stages._extrema import SHARPEN_S, Extrema
from caval.stages._picture import Picture
from caval.stages._signal import nearest, uneven

__all__ = ["Found"]

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
_P_TO_A_S, _LATEST_S = 0.090, 0.08
"""From P to a at the heart (0.08 to 0.10 s, from memory), and the longest delay that z is read with."""
_EARLY = 0.8
"""Share of the usual interval below which a beat is early: its P, if it has one, is not where it usually is."""
_FEW_BEATS = 4
"""Beats either way that tell whether P and evenness are lost."""
_WEAK_MMHG = 0.12
"""An extremum lower than this, or than twice the noise, is weak."""
_DEEPER_SHARE = 0.01
"""A nadir near the one that the picture favours is the one when it is deeper by this share of the picture's height."""


@dataclass(frozen=True, eq=False)
class Hits:
    """Marks of one kind as columns; `time` (s) is NaN where nothing was found, `rise` is the prominence (mmHg).

    `evidence` is what the confidence is made of, shape (n, 5), see `caval.stages._confidence.design`.
    """

    beat: NDArray[np.int64]
    time: Floats
    rise: Floats
    evidence: Floats
    state: NDArray[np.object_]

    @classmethod
    def none(cls, beat: NDArray[np.int64]) -> Hits:
        """No mark for each of some beats."""
        nothing = np.full(len(beat), np.nan)
        return cls(beat, nothing, nothing.copy(), np.full((len(beat), 5), np.nan), np.full(len(beat), "clear", dtype=object))

    def only(self, rows: NDArray) -> Hits:
        """The rows at an index or under a mask."""
        return Hits(*(getattr(self, column.name)[rows] for column in fields(self)))

    def put(self, rows: NDArray, others: Hits) -> None:
        """Set rows to those of others; the beats stay."""
        for column in ("time", "rise", "evidence", "state"):
            getattr(self, column)[rows] = getattr(others, column)


class Found:
    """The waves of all beats, filled wave by wave. Row i of a wave's hits is beat i's; `more_a` are the a that others follow before R."""

    def __init__(self, read: Signal, beats: pd.DataFrame, usable: NDArray[np.bool_], pictures: list[Picture]) -> None:
        self.read = read
        self.r = beats["r_time_s"].to_numpy(float)
        self.beat = beats["beat"].to_numpy(np.int64)
        self.next_r = np.append(self.r[1:], np.inf)
        self.pictures = pictures
        self.centres = np.array([p.centre_s for p in pictures])
        self.which = nearest(self.centres, self.r)
        self.usable = usable & (np.abs(self.r - self.centres[self.which]) <= _FARTHEST_S)
        self.noise = np.array([p.noise_mmhg for p in pictures])
        self.span = np.array([p.span_mmhg for p in pictures])
        self.interval = np.array([p.interval_s for p in pictures])
        self.hits: dict[str, Hits] = {}
        self.more_a = Hits.none(self.beat[:0])

    def time(self, wave: str) -> Floats:
        """Time of the wave of each beat, s, NaN where it was not found."""
        return self.hits[wave].time

    def before(self) -> Floats:
        """Where the waves of the beat before end, s: its y, else its v; NaN where neither was found."""
        last = np.fmax(self.time("y"), self.time("v") + 0.05)
        return np.concatenate([[np.nan], last[:-1]])

    def seek(
        self, wave: str, extrema: Extrema, earliest: Floats, latest: Floats, rows: NDArray[np.bool_] | None = None
    ) -> None:
        """Find a wave, of the beats that have none yet, near its place in the picture, between two bounds; NaN bounds do not bind."""
        old = self.hits.setdefault(wave, Hits.none(self.beat))
        lacking = np.isnan(old.time) if rows is None else np.isnan(old.time) & rows
        hits = self._choose(extrema, *self._near_place(wave, lacking), earliest, latest, self.which, self.beat)
        self._take(extrema, hits)
        found = np.isfinite(hits.time)
        old.put(found, hits.only(found))

    def guess(self, wave: str, extrema: Extrema, earliest: Floats, latest: Floats) -> Floats:
        """Time of each beat's wave as it would be found now, s; its extremum stays free."""
        everywhere = np.ones(len(self.r), dtype=bool)
        return self._choose(extrema, *self._near_place(wave, everywhere), earliest, latest, self.which, self.beat).time

    def _near_place(self, wave: str, rows: NDArray[np.bool_]) -> tuple[Floats, tuple[Floats, Floats | float]]:
        """Where a wave of some beats is sought, and the reach and the worth of height there."""
        place = np.where(self.usable & rows, self.place(wave), np.nan)
        return place, (np.full(len(place), _REACH_S[wave]), _HEIGHT.get(wave, _HEIGHT_USUAL))

    @staticmethod
    def _take(extrema: Extrema, hits: Hits) -> None:
        extrema.taken |= np.isin(extrema.time, hits.time)

    def seek_after_p(self, peaks: Extrema, atria: pd.DataFrame | None, v: Floats) -> Hits:
        """The a after each P that the ECG shows or the pace of the atria places; `v` are where v is likely to stand."""
        if atria is None or not len(atria):
            return Hits.none(self.beat[:0])
        p = atria["time_s"].to_numpy(float)
        which = nearest(self.centres, p)
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
        hits = self._choose(peaks, np.where(sound, place, np.nan), weigh, unbound, unbound, which, beat, v)
        self._take(peaks, hits)
        return hits.only(np.isfinite(hits.time))

    def deepen(self, wave: str, troughs: Extrema, earliest: Floats, latest: Floats) -> None:
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
        hits.time[deeper] = troughs.time[best[deeper]]
        hits.rise[deeper] = troughs.prominence[best[deeper]]

    def hide_v(self, of_p: Hits) -> Floats:
        """Take back each v that is a ripple on the fall of an a of late systole, which hides it; time of that a, NaN without one."""
        v, a = self.time("v"), np.sort(of_p.time)
        if not len(a):
            return np.full(len(v), np.nan)
        before = np.append(a, np.nan)[np.searchsorted(a, v) - 1]
        height = [self.read.at(t) for t in (before, v)]
        span = self.span[self.which]
        ripple = (height[0] - height[1] > _FALL_SHARE * span) & (self.hits["v"].rise < _RIPPLE_SHARE * span)
        hidden = (v - before < _FALL_S) & (before > self.r + 0.16) & ripple
        v[hidden] = np.nan
        return np.where(hidden, before, np.nan)

    def without_a(self, of_p: Hits, coupling: pd.DataFrame | None) -> NDArray[np.bool_]:
        """Beats whose a is sought at a fixed place from R, where the picture has one: those that come in time and have none after a P.

        A lead may hide the P of a beat; the pressure decides whether there is an a. But where beats have lost their P and their evenness,
        as when fibrillation begins, the picture is still that of the rhythm before and says nothing of them.
        """
        in_time = ~(np.diff(self.r, prepend=np.nan) < _EARLY * self.interval[self.which])
        lacking = in_time & ~np.isin(self.beat, of_p.beat)
        if coupling is None or not len(coupling):
            return lacking
        state = pd.Series(self.beat).map(coupling.set_index("beat")["p"]).to_numpy(object)
        gone = ndimage.uniform_filter1d((state == "absent").astype(float), 2 * _FEW_BEATS + 1, mode="nearest") > 0.5
        return lacking & ~(gone & uneven(self.r, 2 * _FEW_BEATS + 1))

    def join_a(self, of_p: Hits) -> None:
        """Add the a found after P; the last of them before R stands for the beat."""
        ordered = of_p.only(np.argsort(of_p.time, kind="stable"))
        last = ~pd.Series(ordered.beat).duplicated(keep="last").to_numpy()
        self.hits["a"].put(np.searchsorted(self.beat, ordered.beat[last]), ordered.only(last))
        self.more_a = ordered.only(~last)

    def _choose(
        self,
        extrema: Extrema,
        place: Floats,
        weigh: tuple[Floats, Floats | float],
        earliest: Floats,
        latest: Floats,
        which: NDArray,
        beat: NDArray,
        others: Floats | None = None,
    ) -> Hits:
        """Of the free extrema within 2.5 of the reach of each place and within the bounds, the one that stands out most and lies nearest.

        `weigh` are that reach (s) and the worth of height. An extremum that is likely another wave's, at one of the times of `others`, is
        only chosen within one reach.
        """
        reach, worth = weigh
        span, noise = self.span[which], self.noise[which]
        low, high = np.fmax(place - 2.5 * reach, earliest), np.fmin(place + 2.5 * reach, latest)
        sought = np.isfinite(place) & (low < high)
        if not len(extrema.time):
            return Hits.none(beat)
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
        rise = prominence[rows, best]
        weak = rise < np.maximum(_WEAK_MMHG, 2.0 * noise)
        second = np.where(np.arange(score.shape[1]) == best[:, None], -np.inf, score).max(axis=1)
        lead = np.where(hit, score[rows, best], 0.0) - np.where(np.isfinite(second), second, -np.inf)
        evidence = np.column_stack([rise / (noise + 0.02), off[rows, best], lead, self.interval[which], rise / span])
        return Hits(beat, np.where(hit, time[rows, best], np.nan), rise, evidence, np.where(weak, "weak", "clear").astype(object))

    def one_of_two(self) -> None:
        """Where a and c have one peak between them, it is the one whose place is nearer."""
        a, c = self.hits["a"], self.hits["c"]
        place = {wave: self.place(wave) for wave in "ac"}
        fast = self.interval[self.which] < _LEAN_INTERVAL_S
        close = fast & (np.abs(place["c"] - place["a"]) < _LEAN_S)
        rows = np.flatnonzero(np.isnan(c.time) & close & (np.abs(a.time - place["c"]) < np.abs(a.time - place["a"])))
        c.put(rows, a.only(rows))
        a.time[rows] = np.nan

    def sharpen(self, wave: str, sharp: Extrema) -> None:
        """Move a broad wave to the free extremum of the finer trace nearest to it, 24 ms at most.

        A wave with one steep side, such as v, has its top nearer to that side than the smoother trace shows.
        """
        time = self.hits[wave].time
        near = sharp.nearest(time)
        close = np.abs(near - time) <= SHARPEN_S
        time[close] = near[close]
        sharp.taken |= np.isin(sharp.time, near[close])

    def place(self, wave: str) -> Floats:
        """Where the picture has the wave of each beat, s; NaN where it has none."""
        return self.r + np.array([p.places.get(wave, np.nan) for p in self.pictures])[self.which]

    def corner_c(self) -> None:
        """Where c has no peak between a and x but the picture has c: the corner of the slope between them."""
        rows = self.usable & np.isnan(self.hits["c"].time)
        at, time = self._corner(rows, self.time("a"), self.time("x"), self.place("c"), 0.05)
        self._fuse("c", at, time)

    def corner_a(self) -> None:
        """Where a fast heart has a P and no peak of a before c: the corner of the slope from the y before to c.

        P to a takes as long as R to c, within the spread of either, so a is expected as long before c as P is before R.
        """
        rows = self.usable & np.isnan(self.time("a")) & (self.interval[self.which] < _LEAN_INTERVAL_S)
        expected = self.time("c") - np.array([p.pr_s for p in self.pictures])[self.which]
        start = np.fmax(self.before(), self.time("c") - 0.25)
        place = np.where(np.isfinite(self.place("a")), self.place("a"), expected)
        at, time = self._corner(rows, start, self.time("c"), place, 0.03)
        self._fuse("a", at, time)

    def corner_v(self, of_p: Hits) -> None:
        """Where a cannon a of late systole hides v: the corner of the slope from it to y."""
        a = np.append(np.sort(of_p.time), np.inf)
        start = a[np.searchsorted(a, self.r + 0.16)]
        rows = self.usable & np.isnan(self.hits["v"].time) & (start < self.time("y"))
        at, time = self._corner(rows, np.where(np.isfinite(start), start, np.nan), self.time("y"), self.place("v"), 0.02, reach_s=0.15)
        self._fuse("v", at, time)

    def _fuse(self, wave: str, at: NDArray[np.int64], time: Floats) -> None:
        """Put a wave of some beats where it has no extremum of its own."""
        hits = self.hits[wave]
        hits.time[at], hits.state[at], hits.evidence[at] = time, "fused", np.nan

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

    def foot_z(self, troughs: Extrema, delay_s: float) -> None:
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
        self.hits["z"] = Hits(self.beat, np.where(has, foot, np.where(readable, at_r, np.nan)), prominence, evidence, state)

    def table(self) -> pd.DataFrame:
        """The marks table."""
        parts = []
        for wave, every in (*self.hits.items(), ("a", self.more_a)):
            hits = every.only(np.isfinite(every.time))
            sure = confidence("c" if wave == "z" else wave, hits.evidence)
            columns = {"beat": hits.beat, "pressure_mmhg": self.read.at(hits.time), "confidence": sure, "state": hits.state}
            parts.append(pd.DataFrame({"time_s": hits.time, "mark": wave, **columns}))
        marks = pd.concat([part for part in parts if len(part)] or parts[:1], ignore_index=True)
        return marks.sort_values(["time_s", "mark"], kind="stable", ignore_index=True)


def _first(index: NDArray[np.int64], score: Floats, hit: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Which hits keep their extremum when several chose the same: the one with the best score."""
    order = np.lexsort((-score, np.where(hit, index, -1)))
    ordered = np.where(hit, index, -1)[order]
    keep = np.zeros(len(index), dtype=bool)
    keep[order] = np.diff(ordered, prepend=-2) != 0
    return keep & hit
