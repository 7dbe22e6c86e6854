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
from caval.stages._picture import KNOT_S, NEIGHBOURS_S
from caval.stages._sequence import best_sequence
from caval.stages._signal import cut, lowpass, median_error, moving_mean, nearest, uneven
from caval.stages.detect import clean_ecg, thinned

__all__ = ["atrial"]

Floats = NDArray[np.float64]

FEWEST = 6
"""Beats below which nothing is said of the atria."""
_LOWPASS_HZ = 25.0
_P_WIDTH_S = 0.11
"""Length of a P wave (below 0.12 s in adults, common practice); its top is taken to lie in its middle."""
_LONGEST_PR_S = 0.42
_QT_S = 0.40
"""QT at an interval of one second; it goes with the root of the interval (Bazett 1920)."""
_QRS_SLOPE = 0.2
_LEAST_P = 0.008
"""Height of a P over that of the QRS complex, at the least (0.1 to 0.2 is usual; common practice)."""
_ONSET_S, _ONSET_SHARE = 0.023, 0.7
"""From the onset of a P of 0.11 s to half its height (for a bump like a normal density of which 2.3 % lie before the onset), at the most;
of a shorter rise, of a narrow P or of one that the QRS complex cuts off, this share of its upper half (the same density)."""
_PROVEN = 6.0
"""Bump of the median over its standard error from which a P is proven: one in 10⁸ by chance at one place, one in 10⁶ over the window."""
_ALIKE = 0.55
"""Correlation with the median's P from which a beat has its own P."""
_SOME_P, _MOST_P = 0.4, 2.5
"""Share of the picture's P that a beat must hold, and may; one that holds the first and does not look like P is not without P."""
_TOO_LOUD = 0.7
"""What of a beat's window is not P, over P, above which a lacking likeness says nothing. Where most beats are as loud, P may march."""
_QUIET = 1.5
"""Roughness, over that of the quietest quarter, up to which a beat takes part in the picture, and up to which its lack of P counts."""
_LOCAL, _LOCAL_SHARE = 15, 0.5
"""Beats that must hold, by their median, this share of the picture's P: a rhythm may begin within the two minutes of a picture."""
_ONE_SIDED = 1.645
_USUAL_P = 0.1
"""Height over that of the QRS complex of a small usual P (common practice). Where none could have been proven, its lack says nothing."""
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
    lead = None if ecg is None else _lead(ecg)
    r = beats["r_time_s"].to_numpy(float)
    normal = (beats["kind"] == "normal").to_numpy() if "kind" in beats else np.ones(len(r), dtype=bool)
    if len(r) < FEWEST or lead is None:
        return tables.empty("atria"), _coupling(beats, np.full(len(r), "unknown", dtype=object), np.full(len(r), np.nan), np.zeros(len(r)))
    state = np.full(len(r), "unknown", dtype=object)
    onset, sure = np.full(len(r), np.nan), np.zeros(len(r))
    marching: list[tuple[float, float]] = []
    ragged = uneven(r, _LOCAL)
    for k in range(int(np.floor(r[0] / KNOT_S)), int(np.ceil(r[-1] / KNOT_S)) + 1):
        here = np.flatnonzero((r >= (k - 0.5) * KNOT_S) & (r < (k + 0.5) * KNOT_S))
        near = np.flatnonzero(np.abs(r - k * KNOT_S) <= NEIGHBOURS_S)
        if not len(here) or len(near) < FEWEST:
            continue
        alike = _alike(normal, near)
        view = _View.of(lead, r[alike], _interval(r, alike))
        if view is None:
            continue  # T runs into the next QRS complex: a P could not be seen
        cell = ((k - 0.5) * KNOT_S, (k + 0.5) * KNOT_S)
        rows = view.rows(r[alike])
        calm = _calm(rows)
        quiet = rows[_roughness(rows) <= calm]
        picture = _Picture.of(view, quiet)
        march = _marching(lead, r, near, cell) if picture is None or picture.doubtful else None
        if march is not None:
            marching += march
            state[here], sure[here] = "apart", 0.9
        elif picture is not None:
            state[here], onset[here], sure[here] = _each(view, picture, r[here], ragged[here], r[alike], rows, calm)
        else:
            state[here], sure[here] = np.where(_roughness(view.rows(r[here])) <= calm, _without(view, quiet), "unknown"), 0.8
    onset, sure = np.round(onset, 6), np.round(sure, 6)  # the ends of a filtered block reach far, but not that high
    atria = _atria(beats, r, onset, sure, np.round(np.array(marching).reshape(-1, 2), 6))
    return atria, _coupling(beats, state, r - onset, sure)


@dataclass(frozen=True, eq=False)
class _Lead:
    """The ECG at about 125 Hz, without its slow wander."""

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


def _lead(ecg: Signal) -> _Lead | None:
    """The lead at about 125 Hz without pacing spikes, which thinning would widen into bumps; None where it shows nothing."""
    cleaned, missing = clean_ecg(ecg)
    if missing.mean() > 0.9 or len(ecg) < 4 * ecg.sampling_rate or np.ptp(cleaned.values) == 0:
        return None
    thin = thinned(cleaned)
    rate = thin.sampling_rate
    wander = moving_mean(moving_mean(thin.values, round(0.9 * rate)), round(0.9 * rate))
    return _Lead(lowpass(thin.values - wander, rate, _LOWPASS_HZ), rate, thin.start_s)


def _hat(rate: float) -> Floats:
    """A bump as wide as a P, less its mean and slope, with unit sum of squares: what it sees has the width of a P and no slope."""
    half = round(_P_WIDTH_S * rate)
    time = np.arange(-half, half + 1) / rate
    bump = np.exp(-0.5 * (time / (0.25 * _P_WIDTH_S)) ** 2)
    bump -= bump.mean()
    return np.asarray(bump / np.linalg.norm(bump))


def _alike(normal: NDArray[np.bool_], near: NDArray[np.int64]) -> NDArray[np.int64]:
    """Of the beats near, those of which the picture is made: not early ones, which have no P or one at another place, and, while enough are
    left, none that comes after an early one, on whose T its P may lie."""
    usual = near[normal[near]]
    calm = usual[normal[np.maximum(usual - 1, 0)]]
    if len(usual) < FEWEST:
        return near
    return calm if len(calm) >= max(FEWEST, len(usual) / 4) else usual


def _interval(r: Floats, rows: NDArray[np.int64]) -> float:
    """The usual interval before some of the beats, s."""
    rows = rows[rows > 0]
    return float(np.median(r[rows] - r[rows - 1]))


def _calm(rows: Floats) -> float:
    """Roughness up to which rows are about as quiet as the quietest: diathermy on many beats must not hide the P of the others."""
    rough = np.sort(_roughness(rows[np.isfinite(rows).all(axis=1)]))
    return float(_QUIET * rough[len(rough) // 4]) if len(rough) >= 2 * FEWEST else np.inf


def _roughness(rows: Floats) -> Floats:
    """Root mean square of the steps from sample to sample of each row; NaN where a row is."""
    step = rows[:, 1:] - rows[:, :-1]
    return np.asarray(np.sqrt(np.einsum("ij,ij->i", step, step) / step.shape[1]))


@dataclass(frozen=True, eq=False)
class _Picture:
    """A proven P.

    Attributes
    ----------
    values : float64 array
        The median of the quieter beats around the P, less its mean.
    first : int
        Index of ``values[0]`` in the rows of the view.
    own : int
        Of the values, so many are P alone: those after it lie below the foot of P and are QRS complex, which beats without a P have too.
    lead_s : float
        From the onset of the P to its top, seconds.
    whole : bool
        T does not reach into its left half.
    doubtful : bool
        Most beats hold more beside the P than P: P waves that march across a hump before R look like that.
    """

    values: Floats
    first: int
    own: int
    lead_s: float
    whole: bool
    doubtful: bool

    @classmethod
    def of(cls, view: _View, rows: Floats) -> _Picture | None:
        """The P that quiet rows of the view prove; None when they prove none."""
        rate = view.lead.rate
        reach = round(0.1 * rate)
        if len(rows) < FEWEST:
            return None
        top = _proven_bump(rows, view.pad, reach, most=round(0.9 * _P_WIDTH_S * rate), least=_LEAST_P * view.qrs)
        if top is None:
            return None
        median = np.median(rows, axis=0)
        first = top - view.pad
        values = median[first : top + view.pad + 1]
        rest = rows[:, first : top + view.pad + 1] - values
        rest = rest - rest.mean(axis=1, keepdims=True)
        values = values - values.mean()
        doubtful = float(np.median(np.linalg.norm(rest, axis=1))) > _TOO_LOUD * float(np.linalg.norm(values))
        rise_s = (top - _half_rise(median, top, reach)) / rate
        whole = first >= view.pad
        lead_s = rise_s + (min(_ONSET_S, _ONSET_SHARE * rise_s) if whole else _ONSET_S)
        return cls(values, first, _end(median, top, view.pad) - first, lead_s, whole, doubtful)


def _end(median: Floats, top: int, pad: int) -> int:
    """Where the fall from a bump passes the foot from which it rose; at the latest `pad` and one after its top."""
    left, right = median[top - pad : top + 1], median[top : top + pad + 1]
    sign = 1.0 if 2 * median[top] > left.min() + left.max() else -1.0
    foot = (sign * left).min()
    below = np.flatnonzero(sign * right < foot)
    return top + (int(below[0]) if len(below) else pad + 1)


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
        if middle > _PROVEN * median_error(low, high, len(rows)):  # the standard error of a median, by the normal law
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
    def of(cls, lead: _Lead, r: Floats, interval_s: float) -> _View | None:
        """The view of some beats, which come `interval_s` after the ones before; None where T runs into the next QRS complex.

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
        before = round(min(_LONGEST_PR_S, interval_s - _QT_S * np.sqrt(interval_s)) * lead.rate)
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


def _each(
    view: _View, picture: _Picture, r: Floats, ragged: NDArray[np.bool_], alike: Floats, shown: Floats, calm: float
) -> tuple[NDArray, Floats, Floats]:
    """Each beat's own P: the place near the picture's where the beat looks most like it, and how much. `alike` are the R that the picture
    was sought among and `shown` their rows: they show whether P is still there. Rows rougher than `calm` deny no P."""
    rate, p, best = view.lead.rate, picture.values, picture.first
    size = float(np.linalg.norm(p))
    rows = view.rows(r)
    outside = np.asarray(~np.isfinite(rows).all(axis=1))
    rows = np.where(outside[:, None], 0.0, rows)
    reach = round(_REACH_S * rate)
    lags = np.arange(max(-reach, -best), min(reach, rows.shape[1] - best - len(p)) + 1)
    windows = np.stack([rows[:, best + lag : best + lag + len(p)] for lag in lags], axis=1)  # beats × lags × samples
    windows = windows - windows.mean(axis=2, keepdims=True)
    along = windows @ p / size
    norms = np.sqrt((windows**2).sum(axis=2)) + 1e-12
    score = along / norms - 0.1 * (lags / reach) ** 2
    at = score.argmax(axis=1)
    of = np.arange(len(r))
    alike_p, amount = along[of, at] / norms[of, at], along[of, at] / size
    still, gone = _nearby(picture, r, ragged, alike, shown)
    has = (alike_p > _ALIKE) & (amount > _SOME_P) & (amount < _MOST_P) & ~outside & still
    noise = np.sqrt(np.maximum(norms[of, at] ** 2 - along[of, at] ** 2, 0.0)) / size
    silent = ((noise > _TOO_LOUD) | (amount > _SOME_P) | (_roughness(rows) > calm)) & ~gone | outside | (not picture.whole)
    state = np.where(has, "coupled", np.where(silent, "unknown", "absent")).astype(object)
    onset = view.time(r, best + lags[at] + _parabola(score, at) + len(p) // 2) - picture.lead_s
    sure = np.where(has, np.clip(alike_p, 0.0, 1.0), 1.0 - np.clip(noise / 2, 0.0, 0.9))
    return state, np.where(has, onset, np.nan), sure


def _nearby(
    picture: _Picture, r: Floats, ragged: NDArray[np.bool_], alike: Floats, shown: Floats
) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Whether the beats around each R still hold the picture's P at its place, and whether they surely do not.

    At its place, not where they look most like it: what is sought is found anywhere. By the median of what each of the beats around holds
    of it; where intervals are uneven, as in fibrillation, three quarters of the beats must hold half as much. Surely not where the
    median lies below by more than its doubt (one-sided, 95 %). Where T reaches into P, the picture stands: this would speak of T.
    """
    p = picture.values[: picture.own]
    slope = np.arange(len(p)) - (len(p) - 1) / 2
    p = p - p.mean() - slope * (slope @ p) / (slope @ slope)  # the end of T is a slope, which moves with the interval
    amount = shown[:, picture.first : picture.first + picture.own] @ p / (p @ p)
    known = np.isfinite(amount)
    amount, place = amount[known], alike[known]
    if len(amount) < _LOCAL or not picture.whole:
        return np.ones(len(r), dtype=bool), np.zeros(len(r), dtype=bool)
    first = np.clip(nearest(place, r) - _LOCAL // 2, 0, len(amount) - _LOCAL)
    around = np.sort(amount[first[:, None] + np.arange(_LOCAL)], axis=1)
    low, middle, high = (around[:, round(share * (_LOCAL - 1))] for share in (0.25, 0.5, 0.75))
    doubt = median_error(low, high, _LOCAL)
    return (middle > _LOCAL_SHARE) & (~ragged | (low > 0.5 * _LOCAL_SHARE)), middle + _ONE_SIDED * doubt < _LOCAL_SHARE


def _without(view: _View, quiet: Floats) -> str:
    """What beats show whose quiet ones prove no P: ``absent`` where a small usual P would have been proven, else ``unknown``."""
    half = round(0.5 * _P_WIDTH_S * view.lead.rate)
    if len(quiet) < FEWEST or view.length < 2 * half:
        return "unknown"  # T leaves no room for a P
    step = quiet[:, half:-half] - np.maximum(quiet[:, : -2 * half], quiet[:, 2 * half :])
    ordered = np.sort(step, axis=0)
    spread = ordered[round(0.75 * (len(step) - 1))] - ordered[round(0.25 * (len(step) - 1))]
    least = _PROVEN * 1.2533 * float(np.median(spread)) / 1.349 / len(quiet) ** 0.5
    return "absent" if least < _USUAL_P * view.qrs else "unknown"


def _parabola(score: Floats, at: NDArray[np.int64]) -> Floats:
    """Fraction of a step by which the top of each row lies off its largest sample."""
    rows = np.arange(len(at))
    middle = np.clip(at, 1, score.shape[1] - 2)
    low, top, high = (score[rows, middle + d] for d in (-1, 0, 1))
    bend = low - 2 * top + high
    shift = np.where(bend < 0, 0.5 * (low - high) / np.where(bend == 0, 1, bend), 0.0)
    return np.where(middle == at, np.clip(shift, -0.5, 0.5), 0.0)


def _marching(lead: _Lead, r: Floats, near: NDArray[np.int64], cell: tuple[float, float]) -> list[tuple[float, float]] | None:
    """Onset and confidence of the P waves of the cell, where they march at a pace of their own; None where none march."""
    first = max(lead.index(np.array([r[near[0]] - 1.0]))[0], 0)
    last = min(lead.index(np.array([r[near[-1]] + 1.0]))[0], len(lead.values))
    place = (r[near] - lead.start_s) * lead.rate - first
    found = _march(_without_qrst(lead.values[first:last], place, lead.rate), place, lead.rate)
    if found is None:
        return None
    index, confidence = found
    onset = lead.start_s + (first + index) / lead.rate - _P_WIDTH_S / 2
    inside = (onset >= cell[0]) & (onset < cell[1])
    return list(zip(onset[inside].tolist(), confidence[inside].tolist(), strict=True))


def _without_qrst(values: Floats, place: Floats, rate: float) -> Floats:
    """A stretch less the median QRS–T of each kind of beat. `place` are the R in samples."""
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
    return rest


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
        at_r = np.abs(place[nearest(place, tops)] - tops) < min(_QRS_S * rate, _QRS_SHARE * float(np.median(np.diff(place))))
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
