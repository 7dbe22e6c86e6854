"""Which stretches of which channel cannot be read, and why: dead, flat, clipped, disconnected, implausible or buried in movement."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import ndimage

from caval import tables
from caval.recording import Signal
from caval.registry import stage
from caval.stages._signal import Thin, bandpass, fill, lowpass, moving_mean, runs

__all__ = ["quality"]

Floats = NDArray[np.float64]
Mask = NDArray[np.bool_]

_LEVEL_MMHG = {"cvp": (-12.0, 45.0), "abp": (10.0, 320.0), "pap": (-12.0, 150.0)}
"""Lowest and highest level, over a second and a half, that a pressure in place takes (own choice, wide of any published normal value)."""
_FLAT_MMHG = 0.02
"""A vessel's pressure ranges more than this over a second, whatever its pulse: breathing and the recorder's noise see to it."""
_SMOOTH_S = 1.5
_NEIGHBOURS_S = 60.0
_GUARD_S = 0.25
_RIPPLE_HZ = (6.0, 25.0)


@stage(name="quality", gives=("spans",), margin_s=_NEIGHBOURS_S + 15.0)
def quality(
    cvp: Signal,
    ecg: Signal | None = None,
    abp: Signal | None = None,
    pap: Signal | None = None,
    *,
    flat_s: float = 1.0,
    movement: float = 2.6,
    roughness: float = 4.0,
    climb_mmhg: float = 8.0,
) -> pd.DataFrame:
    """Spans in which a channel cannot be read.

    Parameters
    ----------
    cvp, ecg, abp, pap : Signal
    flat_s : float
        A trace that does not move for this long, seconds, is flat.
    movement : float
        A second and a half of venous pressure whose range is this many times the usual one (median of the two minutes around) is noise.
    roughness : float
        Ripple at 6 to 25 Hz, over 0.6 s, this many times that of the steepest waves around is noise.
    climb_mmhg : float
        A rise or fall of the venous level by more than this in 6 s, going one way all the time, is no vein's doing.

    Returns
    -------
    DataFrame
        ``onset_s, duration_s, kind, channel, detail``; kinds as in `caval.vocabulary.SPANS`. Stretches of two kinds may overlap.
    """
    found: list[pd.DataFrame] = []
    for role, signal in (("cvp", cvp), ("ecg", ecg), ("abp", abp), ("pap", pap)):
        if signal is None or len(signal) < 2:
            continue
        values, missing = fill(signal.values)
        _add(found, signal, missing, "gap", "not recorded")
        if missing.all():
            continue
        tolerance = _FLAT_MMHG if role in _LEVEL_MMHG else 0.002 * float(np.subtract(*np.percentile(values, [99, 1])))
        still = _still(values, signal.sampling_rate, flat_s, tolerance) & ~missing
        dead = np.zeros_like(still)
        if role in _LEVEL_MMHG:
            dead = _level(found, signal, values, still, *_LEVEL_MMHG[role])
        _add(found, signal, still & ~dead, "flat", f"no movement for {flat_s:g} s or more")
        _add(found, signal, _clipped(values, signal.sampling_rate) & ~missing & ~still, "clipped", "stands at the recorder's limit")
        if role == "cvp":
            blank = missing | still
            climbing = _climbing(values, signal, climb_mmhg) & ~blank
            _add(found, signal, climbing, "implausible", "the level climbs or falls without a turn")
            _add(found, signal, _moved(values, blank, signal, movement), "noise", f"range above {movement:g} times the usual")
            _add(found, signal, _rough(values, blank, signal, roughness), "noise", f"ripple above {roughness:g} times the usual")
            lost = _without_pulse(values, blank, signal) & ~blank
            at_zero = np.abs(moving_mean(values, round(_SMOOTH_S * signal.sampling_rate))) < 1.0
            _add(found, signal, lost & at_zero, "disconnected", "no pulse, and a level of zero")
            _add(found, signal, lost & ~at_zero, "damped", "a level without a pulse")
    return pd.concat(found, ignore_index=True) if found else tables.empty("spans")


def _add(found: list[pd.DataFrame], signal: Signal, mask: Mask, kind: str, detail: str) -> None:
    """Append the stretches of `mask` as spans."""
    stretches = runs(mask)
    if len(stretches):
        onset, stop = (signal.start_s + stretches.T / signal.sampling_rate)
        found.append(pd.DataFrame({"onset_s": onset, "duration_s": stop - onset, "kind": kind, "channel": signal.label, "detail": detail}))


def _keep_long(mask: Mask, samples: int) -> Mask:
    kept = np.zeros_like(mask)
    for start, stop in runs(mask):
        kept[start:stop] = stop - start >= samples
    return kept


def _widen(mask: Mask, samples: int) -> Mask:
    return ndimage.maximum_filter1d(mask, 2 * samples + 1) if mask.any() else mask


def _still(values: Floats, rate: float, flat_s: float, tolerance: float) -> Mask:
    """Samples inside a stretch of `flat_s` or more over which the values range by no more than `tolerance`.

    A tolerance, not equality: a flat line that was resampled or filtered on its way here ripples a little.
    """
    width = max(2, round(flat_s * rate)) | 1
    span = ndimage.maximum_filter1d(values, width, mode="nearest") - ndimage.minimum_filter1d(values, width, mode="nearest")
    core = span <= tolerance
    core[: width // 2] &= core[min(width // 2, len(core) - 1)]  # repeated ends would make any end flat
    core[-(width // 2) :] &= core[max(len(core) - 1 - width // 2, 0)]
    return _widen(core, width // 2)


def _level(found: list[pd.DataFrame], signal: Signal, values: Floats, still: Mask, low: float, high: float) -> Mask:
    """Add what the level of a pressure says, and return where the line is not in the vessel."""
    level = moving_mean(values, round(_SMOOTH_S * signal.sampling_rate))
    dead = ((level < low) | (np.abs(level) < 0.05)) & still
    strange = ((level < low) | (level > high)) & ~dead
    _add(found, signal, dead, "disconnected", "no pulse, and a level of zero or below what a vessel holds")
    strange = _widen(strange, round(_GUARD_S * signal.sampling_rate)) & ~dead
    _add(found, signal, strange, "implausible", f"level outside {low:g} to {high:g} mmHg")
    return dead


def _clipped(values: Floats, rate: float) -> Mask:
    """Runs of one value, 40 ms or more, at the highest or lowest value of the seconds around, entered or left at a step.

    A rounded top whose samples share a value by coarse resolution is entered by single steps of the recorder; a cut one is not.
    """
    same = np.diff(values) == 0
    still = np.concatenate([same, [False]]) | np.concatenate([[False], same])
    still = _keep_long(still, max(4, round(0.04 * rate)))
    stretches = runs(still)
    if not len(stretches):
        return still
    steps = np.abs(np.diff(values))
    finest = steps[steps > 0].min() if (steps > 0).any() else np.inf
    width = round(8.0 * rate) | 1
    at_limit = (values >= ndimage.maximum_filter1d(values, width)) | (values <= ndimage.minimum_filter1d(values, width))
    clipped = np.zeros_like(still)
    for start, stop in stretches:
        edge = max(steps[start - 1] if start else 0.0, steps[stop - 1] if stop < len(values) else 0.0)
        clipped[start:stop] = at_limit[start] and edge > 3.5 * finest
    return clipped


def _climbing(values: Floats, signal: Signal, climb_mmhg: float) -> Mask:
    """Where the level goes one way for six seconds and by more than `climb_mmhg`."""
    thin = Thin.of(signal, 0.25)
    level = thin.take(moving_mean(values, round(_SMOOTH_S * signal.sampling_rate)))
    reach = round(3.0 * signal.sampling_rate / thin.step)
    if len(level) <= 2 * reach + 2:
        return np.zeros(len(values), dtype=bool)
    move = np.diff(level, prepend=level[0])
    change = _moving_sum(move, reach)
    climbing = (np.abs(change) > climb_mmhg) & (np.abs(change) > 0.9 * _moving_sum(np.abs(move), reach))
    climbing &= ndimage.maximum_filter1d(np.abs(move), 2 * reach + 1) < 0.12 * np.abs(change)  # a step is a flush, not a climb
    near = _moving_sum(move, reach // 3)  # over two seconds: where the climb itself is, not what lies around it
    one_way = np.sign(near) == np.sign(ndimage.median_filter(change, 2 * reach + 1, mode="nearest"))
    climbing = _widen(climbing, reach) & (np.abs(near) > climb_mmhg / 8.0) & one_way
    return thin.spread(_widen(climbing, 2))


def _moving_sum(values: Floats, reach: int) -> Floats:
    return np.convolve(values, np.ones(2 * reach + 1), "same")


def _moved(values: Floats, blank: Mask, signal: Signal, movement: float) -> Mask:
    """Where the venous trace ranges much wider than it does around, and no less than 4 mmHg beyond it."""
    thin = Thin.of(signal, 0.1)
    smooth = lowpass(values, signal.sampling_rate, 20.0)
    width = round(1.2 * signal.sampling_rate) | 1
    span = thin.take(ndimage.maximum_filter1d(smooth, width) - ndimage.minimum_filter1d(smooth, width))
    usual = _local_median(span, ~thin.take(blank), thin.time_s(signal))
    return thin.spread((span > movement * usual) & (span > usual + 4.0))


def _rough(values: Floats, blank: Mask, signal: Signal, roughness: float) -> Mask:
    """Where the venous trace ripples at 6 to 25 Hz much more than its steepest waves around do: the line or the patient is handled.

    In simulated patients of every rhythm it does so by no more than 2.2 times.
    """
    rate = signal.sampling_rate
    thin = Thin.of(signal, 0.1)
    band = bandpass(values, rate, *_RIPPLE_HZ)
    ripple = thin.take(np.sqrt(np.maximum(moving_mean(band**2, round(0.6 * rate)), 0.0)))
    steepest = ndimage.maximum_filter1d(ripple, round(1.5 * rate / thin.step) | 1)
    usual = _local_median(steepest, ~thin.take(blank), thin.time_s(signal))
    return _widen(thin.spread(ripple > roughness * usual), round(0.1 * rate))


def _without_pulse(values: Floats, blank: Mask, signal: Signal) -> Mask:
    """Where the venous trace ranges over two seconds by less than a fifth of what it does around: nothing beats on the line."""
    thin = Thin.of(signal, 0.1)
    smooth = lowpass(values, signal.sampling_rate, 8.0)
    width = round(2.0 * signal.sampling_rate) | 1
    span = thin.take(ndimage.maximum_filter1d(smooth, width) - ndimage.minimum_filter1d(smooth, width))
    usual = _local_median(span, ~thin.take(blank), thin.time_s(signal))
    lost = (span < 0.2 * usual) & (usual > 1.0) & np.isfinite(usual)
    return _widen(thin.spread(lost), round(0.9 * signal.sampling_rate))


def _local_median(level: Floats, good: Mask, time: Floats) -> Floats:
    """Median of the good values within a minute either way, learned on the fixed grid of quarter minutes, straight lines between."""
    knots = np.arange(np.floor(time[0] / 15.0), np.ceil(time[-1] / 15.0) + 1) * 15.0
    medians = np.full(len(knots), np.nan)
    for i, knot in enumerate(knots):
        near = slice(*np.searchsorted(time, [knot - _NEIGHBOURS_S, knot + _NEIGHBOURS_S]))
        chosen = level[near][good[near]]
        if len(chosen):
            medians[i] = np.median(chosen)
    known = np.isfinite(medians)
    return np.interp(time, knots[known], medians[known]) if known.any() else np.full(len(level), np.inf)
