"""Beats from the venous trace: a further witness where the ECG is spoilt and no artery speaks, and the only one where there is neither.

The waves of a beat repeat. Where beats are known from elsewhere their mean venous beat is a picture with a known R; else the trace's own
repetition gives the picture, and R is told from the place of x in it: some 0.235 s before x, with a standard deviation of 0.03 s between
patients and lines (seven anaesthetised adults with a fluid line, read by eye). Which of two nadirs is x follows from time: from x to y is
less of the beat than from y to x.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage, signal

from caval.recording import Signal
from caval.stages._evidence import GRID_S, LEARN_S
from caval.stages._signal import bandpass, cut, fill, refine

__all__ = ["VenousBeats", "venous_beats"]

Floats = NDArray[np.float64]

_RATE_HZ = 31.25
_BAND_HZ = (0.7, 8.0)
_BEFORE_S, _AFTER_S = 0.25, 0.45
"""The picture reaches from the a wave to the v wave."""
_R_TO_X_S, _R_TO_X_SD_S = 0.235, 0.06
"""Between patients 0.03 s; more here, because x itself is told from the trace. Where x is lost (regurgitation) or a cannon wave stands in
for it, the R is another's by some 0.3 s, and nothing in the trace says so."""
_PERIOD_S = (0.33, 1.6)
_LEAST_BEATS = 8


@dataclass(frozen=True, eq=False)
class VenousBeats:
    """R times, their standard deviation (s) and the likeness (correlation) of each venous beat to the minute's, shape (n,)."""

    time_s: Floats
    sd_s: Floats
    likeness: Floats


def venous_beats(cvp: Signal, known_s: Floats) -> VenousBeats:
    """Beats that the venous trace shows, minute by minute, from a picture of it and half a minute on either side.

    `known_s` are R times of sure beats; a minute that has at least eight of them around takes its picture from them.
    """
    thin = _thin(cvp)
    rate = thin.sampling_rate
    length = round((_BEFORE_S + _AFTER_S) * rate) | 1
    found: list[tuple[Floats, Floats, Floats]] = []
    for k in range(int(np.floor(thin.start_s / GRID_S + 1e-9)), int(np.ceil(thin.stop_s / GRID_S - 1e-9))):
        from_s, to_s = k * GRID_S - LEARN_S, (k + 1) * GRID_S + LEARN_S
        low, high = np.clip(np.rint(thin.position([from_s, to_s])), 0, len(thin)).astype(int)
        part = thin.values[low:high]
        known = (known_s[(known_s >= from_s) & (known_s < to_s)] - thin.start_s) * rate - low
        if len(part) < 4 * length or not part.any():
            continue
        period = _period(part, rate)
        if len(known) >= _LEAST_BEATS:
            r, sd_s = known, 0.0
        elif period is not None:
            r, sd_s = _own_beats(part, period) - _R_TO_X_S * rate, _R_TO_X_SD_S
        else:
            continue
        picture = _picture(part, r, rate, length)
        peaks, likeness = _matches(part, picture, rate, period)
        at = peaks - 0.5 * (_AFTER_S - _BEFORE_S) * rate
        if len(known) >= _LEAST_BEATS and len(at):
            off = at[np.abs(at[None, :] - known[:, None]).argmin(axis=1)] - known
            off = off[np.abs(off) < 0.15 * rate]
            sd_s = float(np.clip(1.4826 * np.median(np.abs(off)) / rate, 0.01, 0.05)) if len(off) >= _LEAST_BEATS else 0.05
        time = thin.start_s + (low + at) / rate
        here = (time >= k * GRID_S) & (time < (k + 1) * GRID_S)
        found.append((time[here], np.full(here.sum(), sd_s), likeness[here]))
    if not found:
        none = np.empty(0)
        return VenousBeats(none, none, none)
    time, sd, likeness = (np.concatenate(parts) for parts in zip(*found, strict=True))
    return VenousBeats(time, sd, likeness)


def _thin(cvp: Signal) -> Signal:
    """The trace between 0.7 and 8 Hz at about 31 Hz, counted from the start of the record; 0 where nothing was recorded."""
    values, missing = fill(cvp.values)
    rate = cvp.sampling_rate
    band = bandpass(values - np.median(values), rate, *_BAND_HZ)
    band[missing] = 0.0
    step = max(1, round(rate / _RATE_HZ))
    first = -round(cvp.start_s * rate) % step
    return Signal(band[first::step], rate / step, cvp.start_s + first / rate)


def _period(part: Floats, rate: float) -> float | None:
    """The period of the trace in samples, from its autocorrelation; None where nothing repeats."""
    limit = 4.0 * np.median(np.abs(part)) + 1e-12
    part = np.clip(part, -limit, limit)
    spectrum = np.abs(np.fft.rfft(part, 2 * len(part))) ** 2
    same = np.fft.irfft(spectrum)[: len(part) // 2]
    same = same / (same[0] + 1e-12)
    low, high = round(_PERIOD_S[0] * rate), min(round(_PERIOD_S[1] * rate), len(same) - 2)
    peaks, _ = signal.find_peaks(same[: high + 2])
    peaks = peaks[(peaks >= low) & (peaks <= high)]
    if not len(peaks):
        return None
    best = peaks[same[peaks].argmax()]
    shorter = peaks[(peaks < 0.75 * best) & (same[peaks] > 0.9 * same[best])]  # a multiple of the period fits as well as the period
    best = shorter[0] if len(shorter) else best
    return float(best) if same[best] > 0.3 else None


def _own_beats(part: Floats, period: float) -> Floats:
    """Places (samples) of x: the nadir that repeats, of two the one after which the other comes sooner."""
    nadirs, _ = signal.find_peaks(-part, distance=max(1, round(0.6 * period)))
    nadirs = nadirs[-part[nadirs] > 0.5 * np.median(-part[nadirs])]
    if not len(nadirs):
        return np.empty(0)
    length = round(period)
    mean = np.median(cut(part, nadirs, length), axis=0)
    others, _ = signal.find_peaks(-mean[1:-1])
    others = others + 1
    others = others[(others > 0.25 * period) & (others < 0.75 * period)]
    if len(others):
        other = others[mean[others].argmin()]
        if other > 0.5 * period and mean[other] < 0.25 * mean[0]:
            return nadirs + float(other)
    return nadirs.astype(float)


def _picture(part: Floats, r: Floats, rate: float, length: int) -> Floats:
    """The median beat around R, zero mean, unit norm."""
    start = np.rint(r - _BEFORE_S * rate).astype(int)
    start = start[(start >= 0) & (start + length <= len(part))]
    if not len(start):
        return np.zeros(length)
    picture = np.median(cut(part, start, length), axis=0)
    picture = picture - picture.mean()
    return picture / (np.linalg.norm(picture) + 1e-12)


def _matches(part: Floats, picture: Floats, rate: float, period: float | None) -> tuple[Floats, Floats]:
    """Middles (samples) of the stretches most like the picture, no two within 0.6 of a period, and their correlation."""
    length = len(picture)
    match = np.correlate(part, picture, "same")
    mean = ndimage.uniform_filter1d(part, length)
    norm = np.sqrt(np.maximum(ndimage.uniform_filter1d(part**2, length) - mean**2, 0.0) * length) + 1e-6
    likeness = match / norm
    peaks, _ = signal.find_peaks(likeness, distance=max(1, round(0.6 * period if period else 0.3 * rate)), height=0.3)
    return refine(likeness, peaks), likeness[peaks]
