"""P waves at a fixed place before R: proven on the median of many beats, then asked of each."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import signal

from caval.stages._p_lead import FEWEST, P_WIDTH_S, Lead
from caval.stages._signal import cut, median_error, nearest, refine_rows

__all__ = ["LOCAL", "PPicture", "View", "calm_level", "each_beat", "roughness", "without_p"]

Floats = NDArray[np.float64]

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
LOCAL, _LOCAL_SHARE = 15, 0.5
"""Beats that must hold, by their median, this share of the picture's P: a rhythm may begin within the two minutes of a picture."""
_ONE_SIDED = 1.645
_USUAL_P = 0.1
"""Height over that of the QRS complex of a small usual P (common practice). Where none could have been proven, its lack says nothing."""
_REACH_S = 0.05


@dataclass(frozen=True, eq=False)
class PPicture:
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
    def of(cls, view: View, rows: Floats) -> PPicture | None:
        """The P that quiet rows of the view prove; None when they prove none."""
        rate = view.lead.rate
        reach = round(0.1 * rate)
        if len(rows) < FEWEST:
            return None
        top = _proven_bump(rows, view.pad, reach, most=round(0.9 * P_WIDTH_S * rate), least=_LEAST_P * view.qrs)
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


@dataclass(frozen=True, eq=False)
class View:
    """The ECG from the end of T to the onset of the QRS complex, and on either side as many samples of a level as a window needs."""

    lead: Lead
    before: int
    length: int
    pad: int
    qrs: float

    @classmethod
    def of(cls, lead: Lead, r: Floats, interval_s: float) -> View | None:
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
        pad = round(0.55 * P_WIDTH_S * lead.rate)
        if length < round(0.5 * P_WIDTH_S * lead.rate):
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


def each_beat(
    view: View, picture: PPicture, r: Floats, ragged: NDArray[np.bool_], alike: Floats, shown: Floats, calm: float
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
    silent = ((noise > _TOO_LOUD) | (amount > _SOME_P) | (roughness(rows) > calm)) & ~gone | outside | (not picture.whole)
    state = np.where(has, "coupled", np.where(silent, "unknown", "absent")).astype(object)
    onset = view.time(r, best + lags[at] + refine_rows(score, at) + len(p) // 2) - picture.lead_s
    sure = np.where(has, np.clip(alike_p, 0.0, 1.0), 1.0 - np.clip(noise / 2, 0.0, 0.9))
    return state, np.where(has, onset, np.nan), sure


def _nearby(
    picture: PPicture, r: Floats, ragged: NDArray[np.bool_], alike: Floats, shown: Floats
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
    if len(amount) < LOCAL or not picture.whole:
        return np.ones(len(r), dtype=bool), np.zeros(len(r), dtype=bool)
    first = np.clip(nearest(place, r) - LOCAL // 2, 0, len(amount) - LOCAL)
    around = np.sort(amount[first[:, None] + np.arange(LOCAL)], axis=1)
    low, middle, high = (around[:, round(share * (LOCAL - 1))] for share in (0.25, 0.5, 0.75))
    doubt = median_error(low, high, LOCAL)
    return (middle > _LOCAL_SHARE) & (~ragged | (low > 0.5 * _LOCAL_SHARE)), middle + _ONE_SIDED * doubt < _LOCAL_SHARE


def without_p(view: View, quiet: Floats) -> str:
    """What beats show whose quiet ones prove no P: ``absent`` where a small usual P would have been proven, else ``unknown``."""
    half = round(0.5 * P_WIDTH_S * view.lead.rate)
    if len(quiet) < FEWEST or view.length < 2 * half:
        return "unknown"  # T leaves no room for a P
    step = quiet[:, half:-half] - np.maximum(quiet[:, : -2 * half], quiet[:, 2 * half :])
    ordered = np.sort(step, axis=0)
    spread = ordered[round(0.75 * (len(step) - 1))] - ordered[round(0.25 * (len(step) - 1))]
    least = _PROVEN * 1.2533 * float(np.median(spread)) / 1.349 / len(quiet) ** 0.5
    return "absent" if least < _USUAL_P * view.qrs else "unknown"


def calm_level(rows: Floats) -> float:
    """Roughness up to which rows are about as quiet as the quietest: diathermy on many beats must not hide the P of the others."""
    rough = np.sort(roughness(rows[np.isfinite(rows).all(axis=1)]))
    return float(_QUIET * rough[len(rough) // 4]) if len(rough) >= 2 * FEWEST else np.inf


def roughness(rows: Floats) -> Floats:
    """Root mean square of the steps from sample to sample of each row; NaN where a row is."""
    step = rows[:, 1:] - rows[:, :-1]
    return np.asarray(np.sqrt(np.einsum("ij,ij->i", step, step) / step.shape[1]))
