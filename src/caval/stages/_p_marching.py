"""P waves at a pace of their own: what is left of the ECG without QRS and T, where it marches."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage, signal

from caval.stages._p_lead import FEWEST, P_WIDTH_S, Lead
from caval.stages._sequence import best_sequence
from caval.stages._signal import nearest

__all__ = ["marching_p"]

Floats = NDArray[np.float64]

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


def _hat(rate: float) -> Floats:
    """A bump as wide as a P, less its mean and slope, with unit sum of squares: what it sees has the width of a P and no slope."""
    half = round(P_WIDTH_S * rate)
    time = np.arange(-half, half + 1) / rate
    bump = np.exp(-0.5 * (time / (0.25 * P_WIDTH_S)) ** 2)
    bump -= bump.mean()
    return np.asarray(bump / np.linalg.norm(bump))


def marching_p(lead: Lead, r: Floats, near: NDArray[np.int64], cell: tuple[float, float]) -> list[tuple[float, float]] | None:
    """Onset and confidence of the P waves of the cell, where they march at a pace of their own; None where none march."""
    first = max(lead.index(np.array([r[near[0]] - 1.0]))[0], 0)
    last = min(lead.index(np.array([r[near[-1]] + 1.0]))[0], len(lead.values))
    place = (r[near] - lead.start_s) * lead.rate - first
    found = _march(_without_qrst(lead.values[first:last], place, lead.rate), place, lead.rate)
    if found is None:
        return None
    index, confidence = found
    onset = lead.start_s + (first + index) / lead.rate - P_WIDTH_S / 2
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
