"""P waves on the ECG, proven against what noise would give.

A delineator that is asked for the P of a beat finds one, also in fibrillation. Here a P has to be proven first: the median of many
R-aligned beats must show, before R and after the T of the beat before, a bump that stands far above what the beats' own spread leaves in
such a median. Where it does, each beat is asked for its own P, which must look like the median's. Where it does not, the QRS–T picture is
taken away and P waves are sought that march through at a pace of their own; they count when they stand alone, which the waves of
fibrillation do not.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import ndimage, signal

from caval import tables
from caval.recording import Signal
from caval.registry import stage
from caval.stages._sequence import best_sequence
from caval.stages._signal import Thin, cut, fill, lowpass, moving_mean

__all__ = ["atrial"]

Floats = NDArray[np.float64]

KNOT_S = 30.0
NEIGHBOURS_S = 60.0
FEWEST = 6
"""Beats below which nothing is said of the atria."""
_EVERY_S = 0.008
_LOWPASS_HZ = 25.0
_P_WIDTH_S = 0.11
"""Length of a P wave (below 0.12 s in adults, common practice); its top is taken to lie in its middle."""
_LONGEST_PR_S = 0.42
_QT_S = 0.40
"""QT at an interval of one second; it goes with the root of the interval (Bazett 1920)."""
_QRS_SLOPE = 0.2
_LEAST_P = 0.008
"""Height of a P over that of the QRS complex, at the least (0.1 to 0.2 is usual; common practice)."""
_ONSET_S = 0.023
"""From the onset of a P of 0.11 s to half its height (for a bump like a normal density of which 2.3 % lie before the onset)."""
_PROVEN = 6.0
"""Bump of the median over its standard error from which a P is proven: one in 10⁸ by chance at one place, one in 10⁶ over the window."""
_ALIKE = 0.55
"""Correlation with the median's P from which a beat has its own P."""
_TOO_LOUD = 0.7
"""What of a beat's window is not P, over P, above which a lacking likeness says nothing."""
_REACH_S = 0.05
_FASTEST_S, _SLOWEST_S = 0.33, 1.7
"""Intervals between P waves that are tried when they march."""
_LONE = 0.35
"""P waves march when for each of them there are fewer than this many bumps half as large that are none."""
_QRS_S, _QRS_SHARE, _AT_R = 0.10, 0.1, 0.5
"""Bumps this near R, or within this share of the interval, may be what is left of the QRS complex; when the last share of them lies there,
they go with R."""
_LOCKED = 0.7
_STEADY = 0.12
"""Robust coefficient of variation of their intervals up to which P waves march."""


@stage(name="atrial", gives=("atria", "coupling"), margin_s=120.0)
def atrial(beats: pd.DataFrame, ecg: Signal | None = None) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Find P waves, and say of each beat whether it has one.

    Parameters
    ----------
    beats : DataFrame
        As the anchors stage gives them.
    ecg : Signal, optional
        One lead, any unit, either polarity. Without one, nothing is known of the atria.

    Returns
    -------
    atria : DataFrame
        A row a P: ``time_s`` (onset, s), ``beat`` (number of the R that follows), ``coupled``, ``pr_s`` (onset to R, NaN when not coupled),
        ``confidence``. P waves that R or T hide but the pace of the atria places have a confidence of 0.5.
    coupling : DataFrame
        A row a beat: ``beat, r_time_s, p, pr_s, confidence``. `p` is ``coupled``; ``apart`` where P waves march at a pace of their own;
        ``absent`` where the lead is quiet enough to show a P and shows none; ``unknown`` where it is not.
    """
    lead = None if ecg is None else _thin(ecg)
    r = beats["r_time_s"].to_numpy(float)
    if len(r) < FEWEST or lead is None:
        return tables.empty("atria"), _coupling(beats, np.full(len(r), "unknown", dtype=object), np.full(len(r), np.nan), np.zeros(len(r)))
    state = np.full(len(r), "unknown", dtype=object)
    onset, sure = np.full(len(r), np.nan), np.zeros(len(r))
    marching: list[tuple[float, float]] = []
    for k in range(int(np.floor(r[0] / KNOT_S)), int(np.ceil(r[-1] / KNOT_S)) + 1):
        here = np.flatnonzero((r >= (k - 0.5) * KNOT_S) & (r < (k + 0.5) * KNOT_S))
        near = np.flatnonzero(np.abs(r - k * KNOT_S) <= NEIGHBOURS_S)
        if not len(here) or len(near) < FEWEST:
            continue
        view = _View.of(lead, r[near])
        if view is None:
            continue  # T runs into the next QRS complex: a P could not be seen
        said = _coupled(view, r[near], r[here])
        if said is None:
            said = _marching(lead, r, near, here, marching, ((k - 0.5) * KNOT_S, (k + 0.5) * KNOT_S))
        state[here], onset[here], sure[here] = said
    onset, sure = np.round(onset, 6), np.round(sure, 6)  # the ends of a filtered block reach far, but not that high
    atria = _atria(beats, r, onset, sure, np.round(np.array(marching).reshape(-1, 2), 6))
    return atria, _coupling(beats, state, r - onset, sure)


@dataclass(frozen=True, eq=False)
class _Lead:
    """The ECG in steps of about 8 ms, without its slow wander."""

    values: Floats
    rate: float
    start_s: float

    def index(self, time: Floats) -> NDArray[np.int64]:
        return np.floor((time - self.start_s) * self.rate + 0.5 + 1e-6).astype(np.int64)  # a tie goes the same way from any start

    def windows(self, r: Floats, before_s: float, after_s: float) -> Floats:
        """Windows around each R; NaN beyond the ends, shape (len(r), m)."""
        first = self.index(r) - round(before_s * self.rate)
        length = round((before_s + after_s) * self.rate) + 1
        rows = cut(self.values, first, length)
        outside = (first < 0) | (first + length > len(self.values))
        rows[outside] = np.nan
        return rows


def _thin(ecg: Signal) -> _Lead | None:
    """The lead in steps of about 8 ms; None where it shows nothing."""
    values, missing = fill(ecg.values)
    if missing.mean() > 0.9 or len(values) < 4 * ecg.sampling_rate or np.ptp(values) == 0:
        return None
    thin = Thin.of(ecg, _EVERY_S)
    coarse = thin.take(moving_mean(values, thin.step))
    rate = ecg.sampling_rate / thin.step
    wander = moving_mean(moving_mean(coarse, round(0.9 * rate)), round(0.9 * rate))
    return _Lead(lowpass(coarse - wander, rate, _LOWPASS_HZ), rate, ecg.start_s + thin.offset / ecg.sampling_rate)


def _hat(rate: float) -> Floats:
    """A bump as wide as a P, less its mean and slope, with unit sum of squares: what it sees has the width of a P and no slope."""
    half = round(_P_WIDTH_S * rate)
    time = np.arange(-half, half + 1) / rate
    bump = np.exp(-0.5 * (time / (0.25 * _P_WIDTH_S)) ** 2)
    bump -= bump.mean()
    return np.asarray(bump / np.linalg.norm(bump))


def _coupled(view: _View, near: Floats, here: Floats) -> tuple[NDArray, Floats, Floats] | None:
    """What each beat shows when the median of the near ones shows a proven P; None when it does not."""
    rows = view.rows(near)
    rows = rows[np.isfinite(rows).all(axis=1)]
    reach = round(0.1 * view.lead.rate)
    if len(rows) < FEWEST:
        return None
    top = _proven_bump(rows, view.pad, reach, most=round(0.9 * _P_WIDTH_S * view.lead.rate), least=_LEAST_P * view.qrs)
    if top is None:
        return None
    median = np.median(rows, axis=0)
    lead_s = (top - _half_rise(median, top, reach)) / view.lead.rate + _ONSET_S
    return _each(view, here, median[top - view.pad : top + view.pad + 1], top - view.pad, lead_s)


def _half_rise(median: Floats, top: int, reach: int) -> float:
    """Fractional index at which the rise to a bump, or the fall to one upside down, is half done."""
    left = median[max(top - reach, 0) : top + 1]
    foot = int(np.argmax(np.abs(left - median[top])))
    share = (left[foot:] - left[foot]) / (median[top] - left[foot])
    k = int(np.argmax(share >= 0.5))
    return max(top - reach, 0) + foot + k - (share[k] - 0.5) / max(share[k] - share[k - 1], 1e-9)


def _proven_bump(rows: Floats, pad: int, reach: int, *, most: int, least: float) -> int | None:
    """Index of the bump of the median that stands highest above its flanks and is proven; None without one.

    Proven on both flanks: the median over the beats of the step from flank to top is `_PROVEN` of its standard errors. It is higher than
    `least`, and no wider than `most` at half its height.
    """
    median = np.median(rows, axis=0)
    bumps = []
    for sign in (1.0, -1.0):
        upright = sign * median
        for top in signal.find_peaks(upright[pad:-pad], prominence=least)[0] + pad:
            start = max(top - reach, 0)
            left = start + int(np.argmin(upright[start:top]))
            right = top + 1 + int(np.argmin(upright[top + 1 : top + 1 + reach]))
            flanks = upright[top] - max(upright[left], upright[right])
            width = int((upright[left : right + 1] > upright[top] - 0.5 * flanks).sum())
            if flanks > least and width <= most:
                bumps.append((flanks, int(top), left, right, sign))
    for _, top, left, right, sign in sorted(bumps, reverse=True):
        step = np.sort(sign * rows[:, top] - np.maximum(sign * rows[:, left], sign * rows[:, right]))
        low, middle, high = (step[round(share * (len(step) - 1))] for share in (0.25, 0.5, 0.75))
        if middle > _PROVEN * 1.2533 * (high - low) / 1.349 / len(rows) ** 0.5:  # the standard error of a median, by the normal law
            return top
    return None


@dataclass(frozen=True, eq=False)
class _View:
    """The ECG from the end of T to the onset of the QRS complex, and on either side as many samples of a level as a window needs."""

    lead: _Lead
    before: int
    length: int
    pad: int
    qrs: float

    @classmethod
    def of(cls, lead: _Lead, r: Floats) -> _View | None:
        """The view of some beats; None where T runs into the next QRS complex.

        The onset of the QRS complex is where, going back from R, the slope of the median has fallen to a fifth of its steepest.
        """
        around = lead.windows(r, 0.2, 0.1)
        around = around[np.isfinite(around).all(axis=1)]
        if len(around) < FEWEST:
            return None
        slope = np.abs(np.gradient(np.median(around, axis=0)))
        r_at, gap = round(0.2 * lead.rate), max(2, round(0.02 * lead.rate))
        steep = np.flatnonzero(slope[: r_at + 1] > _QRS_SLOPE * slope[r_at - round(0.1 * lead.rate) :].max())[::-1]
        jumps = np.flatnonzero(-np.diff(steep) > gap)
        onset = steep[jumps[0]] if len(jumps) else (steep[-1] if len(steep) else r_at)
        interval = float(np.median(np.diff(r)))
        before = round(min(_LONGEST_PR_S, interval - _QT_S * np.sqrt(interval)) * lead.rate)
        length = before - int(r_at - onset)
        pad = round(0.55 * _P_WIDTH_S * lead.rate)
        if length < round(0.5 * _P_WIDTH_S * lead.rate):
            return None
        return cls(lead, before, length, pad, float(np.ptp(np.median(around, axis=0))))

    def rows(self, r: Floats) -> Floats:
        """A row a beat, shape (len(r), length + 2 pad); NaN beyond the ends of the record."""
        first = self.lead.index(r) - self.before
        inner = cut(self.lead.values, first, self.length)
        inner[(first < 0) | (first + self.length > len(self.lead.values))] = np.nan
        few = max(1, round(0.016 * self.lead.rate))
        ends = (inner[:, :few].mean(axis=1, keepdims=True), inner[:, -few:].mean(axis=1, keepdims=True))
        return np.concatenate([np.repeat(ends[0], self.pad, axis=1), inner, np.repeat(ends[1], self.pad, axis=1)], axis=1)

    def time(self, r: Floats, index: Floats) -> Floats:
        """Seconds of the record of a (fractional) index into the rows."""
        return self.lead.start_s + (self.lead.index(r) - self.before - self.pad + index) / self.lead.rate


def _each(view: _View, r: Floats, picture: Floats, best: int, lead_s: float) -> tuple[NDArray, Floats, Floats]:
    """Each beat's own P: the place near the median's where the beat looks most like it, and how much."""
    rate, half = view.lead.rate, len(picture) // 2
    picture = picture - picture.mean()
    size = float(np.linalg.norm(picture))
    rows = view.rows(r)
    outside = np.asarray(~np.isfinite(rows).all(axis=1))
    rows = np.where(outside[:, None], 0.0, rows)
    reach = round(_REACH_S * rate)
    lags = np.arange(max(-reach, -best), min(reach, rows.shape[1] - best - len(picture)) + 1)
    windows = np.stack([rows[:, best + lag : best + lag + len(picture)] for lag in lags], axis=1)  # beats × lags × samples
    windows = windows - windows.mean(axis=2, keepdims=True)
    along = windows @ picture / size
    norms = np.sqrt((windows**2).sum(axis=2)) + 1e-12
    score = along / norms - 0.1 * (lags / reach) ** 2
    at = score.argmax(axis=1)
    of = np.arange(len(r))
    alike, amount = along[of, at] / norms[of, at], along[of, at] / size
    has = (alike > _ALIKE) & (amount > 0.4) & (amount < 2.5) & ~outside
    noise = np.sqrt(np.maximum(norms[of, at] ** 2 - along[of, at] ** 2, 0.0)) / size
    state = np.where(has, "coupled", np.where((noise > _TOO_LOUD) | outside, "unknown", "absent")).astype(object)
    onset = view.time(r, best + lags[at] + _parabola(score, at) + half) - lead_s
    sure = np.where(has, np.clip(alike, 0.0, 1.0), 1.0 - np.clip(noise / 2, 0.0, 0.9))
    return state, np.where(has, onset, np.nan), sure


def _parabola(score: Floats, at: NDArray[np.int64]) -> Floats:
    """Fraction of a step by which the top of each row lies off its largest sample."""
    rows = np.arange(len(at))
    middle = np.clip(at, 1, score.shape[1] - 2)
    low, top, high = (score[rows, middle + d] for d in (-1, 0, 1))
    bend = low - 2 * top + high
    shift = np.where(bend < 0, 0.5 * (low - high) / np.where(bend == 0, 1, bend), 0.0)
    return np.where(middle == at, np.clip(shift, -0.5, 0.5), 0.0)


def _marching(
    lead: _Lead, r: Floats, near: NDArray, here: NDArray, marching: list[tuple[float, float]], cell: tuple[float, float]
) -> tuple[NDArray, Floats, Floats]:
    """P waves at a pace of their own, added to `marching` where they lie in the cell; without them the beats have none."""
    nothing = np.full(len(here), np.nan)
    first = max(lead.index(np.array([r[near[0]] - 1.0]))[0], 0)
    last = min(lead.index(np.array([r[near[-1]] + 1.0]))[0], len(lead.values))
    place = (r[near] - lead.start_s) * lead.rate - first
    rest, loud = _without_qrst(lead.values[first:last], place, lead.rate)
    found = _march(rest, place, lead.rate)
    if found is None:
        return np.where(loud[np.searchsorted(near, here)], "unknown", "absent").astype(object), nothing, np.full(len(here), 0.8)
    index, confidence = found
    onset = lead.start_s + (first + index) / lead.rate - _P_WIDTH_S / 2
    inside = (onset >= cell[0]) & (onset < cell[1])
    marching += list(zip(onset[inside].tolist(), confidence[inside].tolist(), strict=True))
    return np.full(len(here), "apart", dtype=object), nothing, np.full(len(here), 0.9)


def _without_qrst(values: Floats, place: Floats, rate: float) -> tuple[Floats, NDArray[np.bool_]]:
    """A stretch less the median QRS–T of each kind of beat, and which beats are too loud to judge. `place` are the R in samples."""
    rest = values.copy()
    interval = float(np.median(np.diff(place))) / rate
    before, length = round(0.10 * rate), round((0.10 + min(0.55, interval - 0.12)) * rate)
    offset = np.arange(length) - before
    rows = np.interp(place[:, None] + offset, np.arange(len(values)), values)
    core = rows[:, : before + round(0.12 * rate)]
    usual = np.median(core, axis=0)
    alike = core @ usual / (np.linalg.norm(core, axis=1) * np.linalg.norm(usual) + 1e-12) > 0.8
    for kind in (alike, ~alike):
        if kind.sum() >= 3:
            picture = np.median(rows[kind], axis=0)
            picture = picture - np.linspace(picture[0], picture[-1], length)
            for at in place[kind]:
                first = int(np.ceil(at - before))
                index = np.arange(max(first, 0), min(first + length, len(rest)))
                rest[index] -= np.interp(index - at, offset, picture, left=0.0, right=0.0)
        else:
            for at in place[kind]:
                first, last = np.clip([int(at) - before, int(at) - before + length], 0, len(rest) - 1)
                rest[first : last + 1] = np.linspace(rest[first], rest[last], last + 1 - first)
    quiet = np.interp(place[:, None] + offset, np.arange(len(rest)), rest).std(axis=1)
    return rest, quiet > 4.0 * np.median(quiet)


def _march(rest: Floats, place: Floats, rate: float) -> tuple[NDArray[np.int64], Floats] | None:
    """Places and confidence of bumps that march: alike, alone, at steady intervals and not with R; None where there are none."""
    seen = np.convolve(rest, _hat(rate)[::-1], mode="same")
    best, merit = None, 0.0
    for sign in (1.0, -1.0):
        tops, _ = signal.find_peaks(sign * seen, distance=max(1, round(0.1 * rate)))
        tops = tops[sign * seen[tops] > 0]
        if len(tops) < FEWEST:
            continue
        height = sign * seen[tops]
        at_r = np.abs(place[_nearest(place, tops)] - tops) < min(_QRS_S * rate, _QRS_SHARE * float(np.median(np.diff(place))))
        pace = _pace(sign * seen, rate)
        scale = np.percentile(height, 100 * (1 - min(0.5, 0.5 * len(rest) / rate / pace / len(tops))))
        weight = np.clip(height / scale, 0.0, 1.5) - 0.6 - 0.4 * at_r  # what is left of a QRS complex looks like anything
        chosen = best_sequence(tops / rate, weight, np.full(len(tops), pace), np.zeros(len(tops)))
        if len(chosen) < FEWEST or at_r[chosen].mean() > _AT_R or _locked(tops[chosen], place) > _LOCKED:
            continue
        usual = float(np.median(height[chosen]))
        rivals = np.setdiff1d(np.flatnonzero((height > 0.5 * usual) & ~at_r), chosen)
        gaps = np.diff(tops[chosen]) / rate
        gaps = gaps[gaps < 1.5 * np.median(gaps)]
        steady = 1.4826 * np.median(np.abs(gaps - np.median(gaps))) / np.median(gaps)
        covered = len(chosen) * float(np.median(gaps)) * rate / len(rest)
        if len(rivals) < _LONE * len(chosen) and steady < _STEADY and covered > 0.6 and usual * len(chosen) > merit:
            merit = usual * len(chosen)
            best = _fill_in(tops[chosen], np.clip(height[chosen] / usual, 0.3, 1.0) * np.where(at_r[chosen], 0.6, 0.95))
    return best


def _locked(tops: NDArray, place: Floats) -> float:
    """How much places keep to one phase of the beat: 0 not at all, 1 wholly (length of the mean phase vector)."""
    before = np.clip(np.searchsorted(place, tops) - 1, 0, len(place) - 2)
    phase = (tops - place[before]) / (place[before + 1] - place[before])
    return float(np.abs(np.exp(2j * np.pi * phase).mean()))


def _nearest(places: Floats, query: NDArray) -> NDArray[np.int64]:
    right = np.clip(np.searchsorted(places, query), 1, len(places) - 1)
    return np.where(query - places[right - 1] < places[right] - query, right - 1, right)


def _pace(seen: Floats, rate: float) -> float:
    """The usual interval between bumps, s: the first high top of their autocorrelation."""
    above = np.clip(seen, 0.0, np.percentile(seen, 99))
    above = above - above.mean()
    n = 1 << int(2 * len(above) - 1).bit_length()
    power = np.abs(np.fft.rfft(above, n)) ** 2
    auto = np.fft.irfft(power, n)[: round(2.2 * _SLOWEST_S * rate)]
    auto = ndimage.gaussian_filter1d(auto / auto[0], 0.02 * rate)
    low, high = round(_FASTEST_S * rate), round(_SLOWEST_S * rate)
    tops, _ = signal.find_peaks(auto[low:high])
    if not len(tops):
        return 0.8
    tops = tops + low
    good = tops[auto[tops] > 0.75 * auto[tops].max()]
    return float(good[0] / rate)


def _fill_in(index: NDArray[np.int64], confidence: Floats) -> tuple[NDArray[np.int64], Floats]:
    """Places in which a P was hidden, by the pace of its neighbours, with a confidence of 0.5."""
    gaps = np.diff(index)
    usual = np.median(gaps)
    double = np.flatnonzero(np.abs(gaps / usual - 2.0) < 0.35)
    more = (index[double] + gaps[double] / 2).astype(np.int64)
    order = np.argsort(np.concatenate([index, more]), kind="stable")
    return np.concatenate([index, more])[order], np.concatenate([confidence, np.full(len(more), 0.5)])[order]


def _atria(beats: pd.DataFrame, r: Floats, onset: Floats, sure: Floats, marching: Floats) -> pd.DataFrame:
    """The table of P waves: coupled ones, marching ones, and those that an early beat hides but the pace places."""
    has = np.flatnonzero(np.isfinite(onset))
    lone, lone_sure = marching[:, 0], marching[:, 1]
    hidden = _hidden(onset, has)
    apart = np.sort(np.concatenate([lone, hidden]))
    apart_sure = np.concatenate([lone_sure, np.full(len(hidden), 0.5)])[np.argsort(np.concatenate([lone, hidden]), kind="stable")]
    number = beats["beat"].to_numpy(np.int64)
    follows = np.searchsorted(r, apart)
    known = follows < len(r)
    apart, apart_sure, follows = apart[known], apart_sure[known], follows[known]
    coupled = {"time_s": onset[has], "beat": number[has], "coupled": True, "pr_s": (r - onset)[has], "confidence": sure[has]}
    others = {"time_s": apart, "beat": number[follows], "coupled": False, "pr_s": np.nan, "confidence": apart_sure}
    rows = pd.concat([pd.DataFrame(coupled), pd.DataFrame(others)], ignore_index=True)
    return rows.astype({"coupled": bool}).sort_values("time_s", kind="stable", ignore_index=True)


def _hidden(onset: Floats, has: NDArray[np.int64]) -> Floats:
    """P waves that the pace places: where one beat comes between two beats with a P and has none of its own, an early beat hides it."""
    if len(has) < FEWEST:
        return np.empty(0)
    p = onset[has]
    gaps = np.diff(p)
    usual = ndimage.median_filter(gaps, size=min(31, len(gaps) | 1), mode="nearest")
    skipped = (np.diff(has) == 2) & (np.abs(gaps / usual - 2.0) < 0.3)
    rows = np.flatnonzero(skipped)
    return p[rows] + gaps[rows] / 2


def _coupling(beats: pd.DataFrame, state: NDArray, pr_s: Floats, sure: Floats) -> pd.DataFrame:
    of = {name: beats[name].to_numpy() for name in ("beat", "r_time_s")}
    return pd.DataFrame({**of, "p": state, "pr_s": pr_s, "confidence": sure})
