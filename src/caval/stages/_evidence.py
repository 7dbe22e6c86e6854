"""What the ECG says of each candidate beat, learned minute by minute."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from caval.recording import Signal
from caval.stages._qrs import Shapes, forms, own_place, qrs_picture, unit
from caval.stages._signal import Thin, bandpass, moving_mean
from caval.stages.detect import QRS_BAND_HZ, clean_ecg, qrs_energy, thinned

__all__ = ["ALIKE", "GRID_S", "LEARN_S", "MARGIN_S", "Evidence", "ecg_evidence", "no_evidence"]

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
_SMOOTH, _ROUGH = 1.7, 2.3
"""Roughness over the usual one around a complex: of a trace that is clear, and of one that shows nothing. A wide complex has 0.5 to 1."""
ALIKE = 0.85
"""Correlation with the minute's QRS above which a complex is placed by it."""
_ONE_COMPLEX_S = 0.05
"""Events this close once they are placed are bumps of one complex."""
_ONE_S = 0.40
"""Two events of odd shape this close are the parts of one beat, its QRS and its T at the most: the taller is the QRS."""


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
        return (self.likeness > ALIKE) & (self.quiet > 0.5) & (self.size > 0.4) & (self.size < 2.5)


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
    shapes = Shapes.of(band, place, rate)
    own, height = own_place(thin, energy, place)
    count = len(events)
    size, likeness, sd = np.zeros(count), np.zeros(count), np.full(count, 0.004)
    time = thin.start_s + own / rate
    cells = np.arange(int(np.floor(events[0] / GRID_S + 1e-9)), int(np.floor(events[-1] / GRID_S + 1e-9)) + 1)
    usual, usual_height, rough = (np.full(len(cells), np.nan) for _ in range(3))
    roughness = _roughness(cleaned)
    rough_at_s = roughness.time_s
    for i, k in enumerate(cells):
        low, first, last, high = np.searchsorted(events, k * GRID_S + np.array([-LEARN_S, 0.0, GRID_S, GRID_S + LEARN_S]))
        if high == low:
            continue
        near, here = slice(low, high), slice(first, last)
        teachers = _teachers(events[near], loudness[near], np.interp(events[near], rough_at_s, roughness.values), feet) + low
        usual[i], usual_height[i] = np.median(loudness[teachers]), np.median(height[teachers])
        rough[i] = np.median(np.interp(events[teachers], rough_at_s, roughness.values))
        picture, tip_s, middle_s = qrs_picture(events, loudness / usual[i], teachers, shapes, cleaned, thin)
        whole = unit(np.median(forms(thin, middle_s), axis=0))
        if last == first:
            continue
        size[here] = loudness[here] / max(usual[i], 1e-12)
        shift, likeness[here], error_s = shapes.part(here).lie_on(picture)
        form = forms(thin, thin.start_s + (place[here] + shift) / rate) @ whole
        likeness[here] = np.minimum(likeness[here], 0.5 + 0.5 * form)
        alike = likeness[here] > ALIKE
        time[here] = np.where(alike, thin.start_s + (place[here] + shift) / rate + tip_s, time[here])
        sd[here] = np.where(alike, error_s, sd[here])
    at_s, level = _quiet(ecg, thin, missing, energy, roughness, cells, usual, rough)
    tallness = height / np.maximum(np.nan_to_num(usual_height, nan=np.inf), 1e-12)[np.floor(events / GRID_S + 1e-9).astype(int) - cells[0]]
    height[likeness > ALIKE] = 0.0  # a beat of the usual shape is no part of another
    around = _best_within(events, height, events - _ONE_S, events + _ONE_S)[1]
    standing = np.where(height > 0, height / np.maximum(height[around], 1e-12), 1.0)
    keep = _unlike_neighbours(time, likeness)
    keep = keep[(time[keep] > thin.start_s + 1 / rate) & (time[keep] < thin.stop_s - 2 / rate)]  # a tip beyond the end is not known
    time, sd, size, tallness, likeness, standing = (part[keep] for part in (time, sd, size, tallness, likeness, standing))
    return Evidence(time, sd, size, tallness, likeness, standing, np.interp(time, at_s, level), at_s, level), keep


def _unlike_neighbours(time: Floats, likeness: Floats) -> NDArray[np.int64]:
    """Indices in order of time, less those within `_ONE_COMPLEX_S` of one of greater likeness."""
    order = np.argsort(time, kind="stable")
    best = order[_best_within(time[order], likeness[order], time[order] - _ONE_COMPLEX_S, time[order] + _ONE_COMPLEX_S)[1]]
    return order[best == order]


def _teachers(events: Floats, loudness: Floats, roughness: Floats, feet: Floats) -> NDArray[np.int64]:
    """The events to learn from: those an upstroke follows; without an artery, the loudest of their neighbourhood where it is smooth."""
    feet = feet[(feet > events[0]) & (feet < events[-1] + 0.5)]
    teach = np.unique(_best_within(events, loudness, feet - 0.45, feet - 0.05)[1])
    if len(teach) >= 5:
        return teach
    top = loudness[_best_within(events, loudness, events - 1.2, events + 1.2)[1]]
    alone = _best_within(events, loudness, events - 0.25, events + 0.25)[1] == np.arange(len(events))
    loud = alone & (loudness > 0.7 * np.minimum(top, np.median(top) * 1.5))
    smooth = loud & (roughness < _ROUGH * np.percentile(roughness[loud], 25)) if loud.any() else loud
    return np.flatnonzero(smooth if smooth.any() else loudness == loudness.max())


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


def _best_within(times: Floats, value: Floats, low: Floats, high: Floats) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
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
