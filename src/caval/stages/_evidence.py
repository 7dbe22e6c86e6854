"""What the ECG says of each candidate beat, learned minute by minute."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from caval.recording import Signal
from caval.stages._signal import Thin, bandpass, cut, moving_mean, refine
from caval.stages.detect import QRS_BAND_HZ, clean_ecg, qrs_energy, thinned

__all__ = ["ALIKE", "GRID_S", "LEARN_S", "MARGIN_S", "Evidence", "Transit", "best_within", "ecg_evidence", "learn_transit", "no_evidence"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

GRID_S = 60.0
LEARN_S = 30.0
"""Each minute of the record learns from itself and so much before and after it."""
SETTLE_S = 10.0
"""What filters and running windows see beyond those."""
MARGIN_S = GRID_S + LEARN_S + SETTLE_S
"""The transit of a block's last minute is learned from R times of the next, and those lie on the picture of that whole minute."""

_SILENCE_S = 5.0
_HALF_PICTURE_S = 0.064
_SHIFT_S = 0.040
"""How far a complex may be moved to lie on the picture: the detector's event may be any of its deflections."""
_TEACHERS = 60
"""So many complexes make a picture; a minute with more is thinned evenly."""
_OWN_HALF_S = 0.12
_OWN_WIDTH_S = 0.06
"""A complex of a shape of its own is placed by its largest deflection, near its middle: half a wide QRS (0.12 s or more) is 0.06 s."""
_MAINS_S = 0.02
"""A mean over 20 ms leaves nothing of mains at 50 Hz and a sixth at 60 Hz; a QRS complex lasts four times as long."""
_R_SHARE, _FIRST_SHARE = 1 / 3, 0.5
_FINEST_S = 0.0002
"""A tenth of a sample at 500 Hz: no place is known better."""
_SMOOTH, _ROUGH = 1.7, 2.3
"""Roughness over the usual one around a complex: of a trace that is clear, and of one that shows nothing. A wide complex has 0.5 to 1."""
ALIKE = 0.85
"""Correlation with the minute's QRS above which a complex is placed by it."""
_ONE_COMPLEX_S = 0.05
"""Events this close once they are placed are bumps of one complex."""
_ONE_S = 0.40
"""Two events of odd shape this close are the parts of one beat, its QRS and its T at the most: the taller is the QRS."""
_BAND_EXCESS = 2.8
"""Noise in the QRS band at 125 Hz: samples that hang together, 125 / (2 · 22 Hz)."""


@dataclass(frozen=True, eq=False)
class Evidence:
    """What the ECG says of each event.

    `time_s` is the R time and `sd_s` its standard deviation; `size` is the event's energy over the usual QRS's, `tallness` its height over
    the usual one, `likeness` that to the minute's QRS (correlation, at most 1), `standing` its height over that of the tallest event around
    it, whose part it may be (1 for one like the minute's QRS). `quiet` runs from 0 (the ECG around is as loud as a QRS, or rough) to 1;
    `quiet_at_s`, `quiet_level` give it over time.
    """

    time_s: Floats
    sd_s: Floats
    size: Floats
    tallness: Floats
    likeness: Floats
    standing: Floats
    quiet: Floats
    quiet_at_s: Floats
    quiet_level: Floats

    @property
    def sure(self) -> Bools:
        """Which events are QRS complexes beyond doubt, of the usual shape and size and in quiet."""
        return (self.likeness > 0.8) & (self.quiet > 0.5) & (self.size > 0.4) & (self.size < 2.5)


def no_evidence() -> tuple[Evidence, NDArray[np.int64]]:
    """That of an ECG that is not there."""
    none = np.empty(0)
    return Evidence(none, none, none, none, none, none, none, np.array([0.0]), np.array([0.0])), np.empty(0, dtype=np.int64)


def ecg_evidence(ecg: Signal, events: Floats, feet: Floats) -> tuple[Evidence, NDArray[np.int64]]:
    """Place, size, likeness and quiet of each event, with the picture and the size of the QRS of its minute; and which events they are of.

    In order of R times; of events that turn out to be of one complex, the one most like the minute's QRS. `feet` are strong arterial
    upstrokes: the complexes they follow are the ones to learn from.
    """
    cleaned, missing = clean_ecg(ecg)
    thin = thinned(cleaned)
    rate = thin.sampling_rate
    band = bandpass(thin.values - np.median(thin.values), rate, *QRS_BAND_HZ)
    energy = qrs_energy(band, rate)
    place = np.clip(np.rint(thin.position(events)).astype(int), 0, len(band) - 1)
    loudness = ndimage.maximum_filter1d(energy, round(0.08 * rate) | 1)[place]
    shapes = _Shapes.of(band, place, rate)
    own, height = _own_place(thin, energy, place)
    count = len(events)
    size, likeness, sd = np.zeros(count), np.zeros(count), np.full(count, 0.004)
    time = thin.start_s + own / rate
    cells = np.arange(int(np.floor(events[0] / GRID_S + 1e-9)), int(np.floor(events[-1] / GRID_S + 1e-9)) + 1)
    usual, usual_height, rough = (np.full(len(cells), np.nan) for _ in range(3))
    roughness = _roughness(cleaned)
    rough_at_s = roughness.time_s
    for i, k in enumerate(cells):
        low, first, last, high = np.searchsorted(events, np.array([k * GRID_S - LEARN_S, k * GRID_S, (k + 1) * GRID_S, (k + 1) * GRID_S + LEARN_S]))
        if high == low:
            continue
        near, here = slice(low, high), slice(first, last)
        teachers = _teachers(events[near], loudness[near], np.interp(events[near], rough_at_s, roughness.values), feet) + low
        usual[i], usual_height[i] = np.median(loudness[teachers]), np.median(height[teachers])
        rough[i] = np.median(np.interp(events[teachers], rough_at_s, roughness.values))
        picture, tip_s, middle_s = _picture(events, loudness / usual[i], teachers, shapes, cleaned, thin)
        whole = _unit(np.median(_forms(thin, middle_s), axis=0))
        if last == first:
            continue
        size[here] = loudness[here] / max(usual[i], 1e-12)
        shift, likeness[here], error_s = shapes.part(here).lie_on(picture)
        form = _forms(thin, thin.start_s + (place[here] + shift) / rate) @ whole
        likeness[here] = np.minimum(likeness[here], 0.5 + 0.5 * form)
        alike = likeness[here] > ALIKE
        time[here] = np.where(alike, thin.start_s + (place[here] + shift) / rate + tip_s, time[here])
        sd[here] = np.where(alike, error_s, sd[here])
    at_s, level = _quiet(ecg, thin, missing, energy, roughness, cells, usual, rough)
    tallness = height / np.maximum(np.nan_to_num(usual_height, nan=np.inf), 1e-12)[np.floor(events / GRID_S + 1e-9).astype(int) - cells[0]]
    height[likeness > ALIKE] = 0.0  # a beat of the usual shape is no part of another
    around = best_within(events, height, events - _ONE_S, events + _ONE_S)[1]
    standing = np.where(height > 0, height / np.maximum(height[around], 1e-12), 1.0)
    keep = _unlike_neighbours(time, likeness)
    keep = keep[(time[keep] > thin.start_s + 1 / rate) & (time[keep] < thin.stop_s - 2 / rate)]  # a tip beyond the end is not known
    time, sd, size, tallness, likeness, standing = (part[keep] for part in (time, sd, size, tallness, likeness, standing))
    return Evidence(time, sd, size, tallness, likeness, standing, np.interp(time, at_s, level), at_s, level), keep


def _unlike_neighbours(time: Floats, likeness: Floats) -> NDArray[np.int64]:
    """Indices in order of time, less those within `_ONE_COMPLEX_S` of one of greater likeness."""
    order = np.argsort(time, kind="stable")
    best = order[best_within(time[order], likeness[order], time[order] - _ONE_COMPLEX_S, time[order] + _ONE_COMPLEX_S)[1]]
    return order[best == order]


@dataclass(frozen=True, eq=False)
class _Shapes:
    """The QRS band around each event: rows of `wide` hold the picture's length and the shift either way; `norm` that of each shift."""

    wide: Floats
    norm: Floats
    shift: int
    rate: float

    @classmethod
    def of(cls, band: Floats, place: NDArray[np.int64], rate: float) -> _Shapes:
        half, shift = round(_HALF_PICTURE_S * rate), round(_SHIFT_S * rate)
        wide = cut(band, place - half - shift, 2 * (half + shift) + 1)
        power = np.cumsum(np.pad(wide**2, ((0, 0), (1, 0))), axis=1)
        length = 2 * half + 1
        return cls(wide, np.sqrt(np.maximum(power[:, length:] - power[:, :-length], 0.0)) + 1e-12, shift, rate)

    def part(self, which: slice | NDArray) -> _Shapes:
        return _Shapes(self.wide[which], self.norm[which], self.shift, self.rate)

    def lie_on(self, picture: Floats) -> tuple[Floats, Floats, Floats]:
        """Shift (samples) at which each lies best on the picture (unit norm), the correlation there, and the error of that place, s.

        The error is that of a matched filter: noise over slope. The noise is what the picture leaves unexplained.
        """
        match = np.stack([self.wide[:, k : k + len(picture)] @ picture for k in range(2 * self.shift + 1)], axis=1)
        likeness = match / self.norm
        best = likeness.argmax(axis=1)
        rows = np.arange(len(best))
        inner = np.clip(best, 1, 2 * self.shift - 1)
        before, here, after = likeness[rows, inner - 1], likeness[rows, inner], likeness[rows, inner + 1]
        bend = before - 2 * here + after
        step = np.where((bend < 0) & (inner == best), 0.5 * (before - after) / np.where(bend < 0, bend, -1.0), 0.0)
        top = likeness[rows, best]
        left = np.sqrt(np.maximum(1.0 - np.clip(top, 0.0, 1.0) ** 2, 0.0) / len(picture))
        slope = np.linalg.norm(np.gradient(picture))
        error = np.sqrt(_BAND_EXCESS) * left / (np.maximum(top, 0.05) * slope)
        return best - self.shift + np.clip(step, -0.5, 0.5), top, np.hypot(error / self.rate, _FINEST_S)

    def laid(self, shift: Floats) -> Floats:
        """The picture's stretch of each at its (whole) shift, unit norm, shape (n, length)."""
        start = np.rint(shift).astype(int) + self.shift
        length = self.wide.shape[1] - 2 * self.shift
        rows = np.arange(len(start))
        return self.wide[rows[:, None], start[:, None] + np.arange(length)] / self.norm[rows, start][:, None]


def _teachers(events: Floats, loudness: Floats, roughness: Floats, feet: Floats) -> NDArray[np.int64]:
    """The events to learn from: those an upstroke follows; without an artery, the loudest of their neighbourhood where it is smooth."""
    feet = feet[(feet > events[0]) & (feet < events[-1] + 0.5)]
    teach = np.unique(best_within(events, loudness, feet - 0.45, feet - 0.05)[1])
    if len(teach) >= 5:
        return teach
    top = loudness[best_within(events, loudness, events - 1.2, events + 1.2)[1]]
    alone = best_within(events, loudness, events - 0.25, events + 0.25)[1] == np.arange(len(events))
    loud = alone & (loudness > 0.7 * np.minimum(top, np.median(top) * 1.5))
    smooth = loud & (roughness < _ROUGH * np.percentile(roughness[loud], 25)) if loud.any() else loud
    return np.flatnonzero(smooth if smooth.any() else loudness == loudness.max())


def _picture(
    events: Floats, size: Floats, teachers: NDArray[np.int64], shapes: _Shapes, cleaned: Signal, thin: Signal
) -> tuple[Floats, float, Floats]:
    """QRS picture (band, unit norm) of the teachers, how long after its middle the tip of R comes (s), and when those middles are (s)."""
    gap = np.diff(events[teachers], prepend=-np.inf)
    fair = teachers[(size[teachers] > 0.4) & (size[teachers] < 2.5)]
    late = teachers[(size[teachers] > 0.4) & (size[teachers] < 2.5) & (gap > 0.9 * np.mean(gap[1:]))] if len(gap) > 1 else fair
    fair = late if len(late) >= _LEAST_BEATS else fair if len(fair) else teachers  # premature beats are no model
    fair = fair[:: -(-len(fair) // _TEACHERS)]
    some = shapes.part(fair)
    shift = np.zeros(len(fair))
    laid = some.laid(shift)
    alike = laid @ laid.T > 0.9
    picture = _unit(np.median(laid[alike[alike.sum(axis=1).argmax()]], axis=0))  # the commonest shape, not a mean of several
    for _ in range(2):
        shift, likeness, _ = some.lie_on(picture)
        alike = likeness > 0.8
        if alike.sum() < 3:
            return picture, 0.0, events[fair]
        picture = _unit(np.median(some.laid(shift)[alike], axis=0))
    shift, likeness, _ = some.lie_on(picture)
    good = likeness >= min(0.8, float(np.median(likeness)))
    middle_s = (np.rint(thin.position(events[fair[good]])) + shift[good]) / thin.sampling_rate + thin.start_s
    return picture, _tip(cleaned, middle_s), middle_s


def _forms(thin: Signal, middle_s: Floats) -> Floats:
    """The whole complex (0.12 s either way, all its frequencies, less the line between its ends), unit norm, a row each."""
    half = round(_OWN_HALF_S * thin.sampling_rate)
    windows = cut(thin.values, np.rint(thin.position(middle_s)).astype(int) - half, 2 * half + 1)
    left, right = windows[:, :3].mean(axis=1), windows[:, -3:].mean(axis=1)
    windows = windows - left[:, None] - (right - left)[:, None] * np.linspace(0.0, 1.0, 2 * half + 1)
    return windows / (np.linalg.norm(windows, axis=1, keepdims=True) + 1e-12)


def _unit(picture: Floats) -> Floats:
    return picture / (np.linalg.norm(picture) + 1e-12)


def _tip(cleaned: Signal, middle_s: Floats) -> float:
    """How long after the picture's middle the tip of R comes, s: from the median complex at the full rate of the trace.

    R is the first tall upward deflection, near the middle of the complex; where none reaches a third of the deepest downward one (a QS
    complex, a lead turned round), that. So it does not change places when R and S, Q and R, or R and R' are about as large.
    """
    rate = cleaned.sampling_rate
    half, reach = round(0.2 * rate), round(0.08 * rate)
    exact = cleaned.position(middle_s)
    whole = np.rint(exact).astype(int)
    beat = moving_mean(np.median(cut(cleaned.values, whole - half, 2 * half + 1), axis=0), round(_MAINS_S * rate))
    beat = (beat - np.median(beat))[half - reach : half + reach + 1]
    place = np.arange(-reach, reach + 1)
    centre = float(np.sum(place * beat**2) / (np.sum(beat**2) + 1e-12))
    near = beat * np.exp(-0.5 * ((place - centre) / (_OWN_WIDTH_S * rate)) ** 2)
    if near.max() <= -_R_SHARE * near.min():
        beat, near = -beat, -near
    tall = np.flatnonzero((beat[1:-1] >= beat[:-2]) & (beat[1:-1] > beat[2:]) & (near[1:-1] >= _FIRST_SHARE * near.max())) + 1
    tip = tall[0] if len(tall) else int(near.argmax())
    return float((refine(beat, np.array([tip]))[0] - reach - np.mean(exact - whole)) / rate)


def _own_place(thin: Signal, energy: Floats, place: NDArray[np.int64]) -> tuple[Floats, Floats]:
    """Where each event's largest deflection is, in samples of the thin trace, and its size: that of a complex of a shape of its own."""
    rate = thin.sampling_rate
    half, reach = round(_OWN_HALF_S * rate), round(0.06 * rate)
    middle = np.clip(place - reach + cut(energy, place - reach, 2 * reach + 1).argmax(axis=1), 0, len(energy) - 1)
    windows = cut(thin.values, middle - 2 * half, 4 * half + 1)
    size = np.abs(windows - np.median(windows, axis=1, keepdims=True))[:, half : 3 * half + 1]
    nearness = np.exp(-0.5 * (np.arange(-half, half + 1) / (_OWN_WIDTH_S * rate)) ** 2)
    peak = (size * nearness).argmax(axis=1)
    rows = np.arange(len(peak))
    for _ in range(3):  # up to the top itself: nearness only chooses which
        step = cut_rows(size, peak - 1, 3).argmax(axis=1) - 1
        peak = np.clip(peak + step, 0, 2 * half)
    before, here, after = cut_rows(size, peak - 1, 3).T
    bend = before - 2 * here + after
    inside = (bend < 0) & (peak > 0) & (peak < 2 * half)
    step = np.where(inside, 0.5 * (before - after) / np.where(bend < 0, bend, -1.0), 0.0)
    return middle - half + peak + np.clip(step, -0.5, 0.5), size[rows, peak]


def cut_rows(values: Floats, starts: NDArray[np.int64], length: int) -> Floats:
    """From each row of `values` the stretch from its start, shape (n, length); ends repeated."""
    index = np.clip(starts[:, None] + np.arange(length), 0, values.shape[1] - 1)
    return np.take_along_axis(values, index, axis=1)


def _roughness(cleaned: Signal) -> Signal:
    """How rough the trace is (RMS over 0.8 s of its bend over 4 ms either way), some 25 times a second.

    Diathermy and electrode noise are rough; no complex of the heart is, be it ever so wide: its spectrum ends near 40 Hz (common practice).
    """
    rate, values = cleaned.sampling_rate, cleaned.values
    every, reach = max(1, round(0.004 * rate)), max(1, round(0.004 * rate))
    group = max(1, round(0.04 * rate / every))
    first = -round(cleaned.start_s * rate) % (every * group)
    middle = values[first + reach : len(values) - reach : every]
    bend = middle - 0.5 * (values[first : len(values) - 2 * reach : every] + values[first + 2 * reach :: every])
    bend = bend[: len(bend) // group * group].reshape(-1, group)
    step_s = every * group / rate
    power = np.einsum("ij,ij->i", bend, bend) / group if len(bend) else np.zeros(1)
    level = np.sqrt(np.maximum(moving_mean(power, round(0.8 / step_s)), 0.0))
    return Signal(level, 1 / step_s, cleaned.start_s + first / rate + step_s / 2)


def _quiet(
    ecg: Signal, thin: Signal, missing: Bools, energy: Floats, roughness: Signal, cells: NDArray[np.int64], usual: Floats, rough: Floats
) -> tuple[Floats, Floats]:
    """Times and, at each, 0 (as loud as a QRS, rough, or a lead that shows nothing) to 1 (quiet)."""
    rate = thin.sampling_rate
    sparse = Thin.of(thin, 0.04)
    at_s = sparse.time_s(thin)
    level = sparse.take(energy)
    per_s = rate / sparse.step
    background = ndimage.percentile_filter(level, 45, size=round(1.6 * per_s) | 1)
    cell = np.clip(np.floor(at_s / GRID_S + 1e-9).astype(int) - cells[0], 0, len(cells) - 1)
    usual_then = usual[cell]
    usual_then = np.maximum(np.nan_to_num(usual_then, nan=np.inf), 1e-12)
    quiet = np.clip((0.45 - background / usual_then) / 0.30, 0.0, 1.0)
    rougher = np.interp(at_s, roughness.time_s, roughness.values) / np.maximum(np.nan_to_num(rough[cell], nan=np.inf), 1e-12)
    quiet *= np.clip((_ROUGH - rougher) / (_ROUGH - _SMOOTH), 0.0, 1.0)
    width = round(0.5 * rate) | 1
    swing = sparse.take(ndimage.maximum_filter1d(thin.values, width) - ndimage.minimum_filter1d(thin.values, width))
    loudest = ndimage.maximum_filter1d(level, round(_SILENCE_S * per_s) | 1)
    quiet[(loudest < 0.3 * usual_then) | (swing < 0.01 * usual_then)] = 0.0  # a lead that shows nothing says nothing
    quiet[missing[np.clip(np.rint(ecg.position(at_s)), 0, len(ecg) - 1).astype(int)]] = 0.0
    return at_s, quiet


def best_within(times: Floats, value: Floats, low: Floats, high: Floats) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """For each interval ``[low, high)`` that holds any of the sorted `times`: its number, and the index of the largest value in it."""
    first, last = np.searchsorted(times, low), np.searchsorted(times, high)
    filled = np.flatnonzero(last > first)
    if not len(filled):
        return filled, filled
    first, last = first[filled], last[filled]
    index = first[:, None] + np.arange((last - first).max())
    inside = index < last[:, None]
    best = np.where(inside, value[np.minimum(index, len(value) - 1)], -np.inf).argmax(axis=1)
    return filled, first + best


_LOCAL_REACH_S = 8.0
_LOCAL_BEATS = 9
_LEAST_BEATS = 8
_DEFAULT_SPREAD_S = 0.04
"""Transit to a radial artery differs so much from person to person (0.15 to 0.25 s is usual, common practice; more when old or cold)."""


@dataclass(frozen=True, eq=False)
class Transit:
    """From R to the foot of the upstroke: that of the beats around where there are any, else that of the minutes, else the setting.

    `time_s`, `local_s`: running median over the beats that show it, shape (n,). `first`: number of the first minute of `minutes_s`, a
    row a minute: transit, robust standard deviation around it, the same around the running median.
    """

    time_s: Floats
    local_s: Floats
    first: int
    minutes_s: Floats

    def at(self, feet: Floats) -> tuple[Floats, Floats]:
        """Transit and its standard deviation for each upstroke, s."""
        cell = np.clip(np.floor(feet / GRID_S + 1e-9).astype(int) - self.first, 0, len(self.minutes_s) - 1)
        transit, spread, local_spread = self.minutes_s[cell].T
        if len(self.time_s) < 2:
            return transit, spread
        after = np.clip(np.searchsorted(self.time_s, feet), 1, len(self.time_s) - 1)
        distance = np.minimum(np.abs(feet - self.time_s[after - 1]), np.abs(feet - self.time_s[after]))
        local = distance < _LOCAL_REACH_S
        return np.where(local, np.interp(feet, self.time_s, self.local_s), transit), np.where(local, local_spread, spread)


def learn_transit(evidence: Evidence, feet: Floats, default_s: float) -> Transit:
    """Transit times from the sure complexes and the strong upstrokes after them."""
    r = evidence.time_s[evidence.sure]
    place = np.searchsorted(feet, r + 0.05)
    r, place = r[place < len(feet)], place[place < len(feet)]
    after = feet[place] - r
    r, after = r[after < 0.45], after[after < 0.45]
    local = ndimage.median_filter(after, size=_LOCAL_BEATS, mode="nearest") if len(after) >= _LOCAL_BEATS else after
    ends = [t for times in (r, feet) if len(times) for t in (times[0], times[-1])] or [0.0]
    first, last = (int(np.floor(t / GRID_S + 1e-9)) for t in (min(ends), max(ends)))
    minutes = np.tile([default_s, _DEFAULT_SPREAD_S, _DEFAULT_SPREAD_S], (last - first + 1, 1))
    for i in range(len(minutes)):
        low, high = np.searchsorted(r, GRID_S * (first + i + np.array([0, 1])) + LEARN_S * np.array([-1, 1]))
        if high - low >= _LEAST_BEATS:
            some = after[low:high]
            middle = np.median(some)
            minutes[i] = middle, _spread(some - middle), _spread(some - local[low:high])
    return Transit(r, local, first, minutes)


def _spread(error: Floats) -> float:
    """Robust standard deviation around 0, no less than a quarter of a sample of a 125 Hz trace."""
    return float(np.clip(1.4826 * np.median(np.abs(error)), 0.002, _DEFAULT_SPREAD_S))
