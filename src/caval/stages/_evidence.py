"""What the ECG says of each candidate beat, learned minute by minute."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from caval.recording import Signal
from caval.stages._signal import Thin, bandpass, cut, fill, grid, moving_mean
from caval.stages.detect import QRS_BAND_HZ

__all__ = ["GRID_S", "Evidence", "ecg_evidence", "no_evidence"]

Floats = NDArray[np.float64]

GRID_S = 60.0
_SILENCE_S = 5.0
_HALF_PICTURE_S = 0.06


@dataclass(frozen=True, eq=False)
class Evidence:
    """What the ECG says of each event, and the transit times learned from both.

    `size` is the event's energy over the usual QRS's, `likeness` the correlation with the minute's QRS, `quiet` runs from 0 (the ECG
    around is as loud as a QRS) to 1. `quiet_at_s`/`quiet_level` give it over time. Transit and its spread are per grid minute.
    """

    size: Floats
    likeness: Floats
    quiet: Floats
    quiet_at_s: Floats
    quiet_level: Floats
    minute_s: Floats
    transit_s: Floats
    spread_s: Floats


def no_evidence(transit_s: float) -> Evidence:
    none = np.empty(0)
    return Evidence(none, none, none, np.array([0.0]), np.array([0.0]), np.array([0.0]), np.array([transit_s]), np.array([0.03]))


def ecg_evidence(ecg: Signal, events: Floats, feet: Floats, transit_s: float) -> Evidence:
    """Size, likeness and quiet of each event, with the picture, the size and the transit time of its minute."""
    values, missing = fill(ecg.values)
    rate = ecg.sampling_rate
    band = bandpass(values - np.median(values), rate, *QRS_BAND_HZ)
    energy = np.sqrt(np.maximum(moving_mean(band**2, round(0.09 * rate)), 0.0))  # its running sum may end a rounding below 0
    place = np.clip(np.rint(ecg.position(events)).astype(int), 0, len(values) - 1)
    loudness = ndimage.maximum_filter1d(energy, round(0.08 * rate) | 1)[place]
    thin = Thin.of(ecg, 0.04)
    background = ndimage.percentile_filter(thin.take(energy), 45, size=round(1.6 * rate / thin.step) | 1)
    background_at_s = thin.time_s(ecg)
    half = round(_HALF_PICTURE_S * rate)
    shapes = cut(band, place - half, 2 * half + 1)
    norms = np.sqrt((shapes**2).sum(axis=1)) + 1e-12

    size, likeness = np.zeros(len(events)), np.zeros(len(events))
    minutes, transits, spreads, usual_at = [], [], [], []
    transit, spread, usual = transit_s, 0.03, float(np.median(loudness))
    for start_s, stop_s in grid(events[0], events[-1] + 1e-9, GRID_S):
        near = (events >= start_s - GRID_S) & (events < stop_s + GRID_S)
        here = (events >= start_s) & (events < stop_s)
        if near.any():
            usual, picture, transit, spread = _learn(events[near], loudness[near], shapes[near], norms[near], feet, transit, spread)
            size[here] = loudness[here] / max(usual, 1e-12)
            likeness[here] = shapes[here] @ picture / norms[here]
        minutes.append((start_s + stop_s) / 2)
        transits.append(transit)
        spreads.append(spread)
        usual_at.append(usual)
    usual_then = np.interp(background_at_s, minutes, usual_at)
    ratio = background / np.maximum(usual_then, 1e-12)
    quiet_level = np.clip((0.45 - ratio) / 0.30, 0.0, 1.0)
    width = round(0.5 * rate) | 1
    swing = thin.take(ndimage.maximum_filter1d(values, width) - ndimage.minimum_filter1d(values, width))
    loudest = ndimage.maximum_filter1d(thin.take(energy), round(_SILENCE_S * rate / thin.step) | 1)
    quiet_level[(loudest < 0.3 * usual_then) | (swing < 0.01 * usual_then)] = 0.0  # a lead that shows nothing says nothing
    quiet_level[thin.take(missing)] = 0.0
    quiet = thin.spread(quiet_level)[place]
    return Evidence(size, likeness, quiet, background_at_s, quiet_level, np.array(minutes), np.array(transits), np.array(spreads))


def _learn(
    events: Floats, loudness: Floats, shapes: Floats, norms: Floats, feet: Floats, transit: float, spread: float
) -> tuple[float, Floats, float, float]:
    """QRS size, QRS picture (unit norm), transit time and its spread from the events and upstrokes of three minutes.

    The beats that teach are the events an upstroke follows; without an artery, the loudest of their neighbourhood.
    """
    window_feet = feet[(feet > events[0]) & (feet < events[-1] + 0.5)]
    teach = _followed(events, loudness, window_feet)
    if teach.sum() < 5:
        top = np.array([loudness[np.abs(events - t) < 1.2].max() for t in events])
        teach = loudness > 0.7 * np.minimum(top, np.median(top) * 1.5)
    usual = float(np.median(loudness[teach]))
    fair = teach & (loudness > 0.4 * usual) & (loudness < 2.5 * usual)
    unit = shapes[fair] / norms[fair, None] if fair.any() else shapes / norms[:, None]
    picture = np.median(unit, axis=0)
    alike = unit @ picture > 0.5 * np.linalg.norm(picture)
    if alike.sum() >= 3:
        picture = np.median(unit[alike], axis=0)
    picture = picture / (np.linalg.norm(picture) + 1e-12)
    good = fair & (shapes @ picture / norms > 0.8)
    if good.sum() >= 8 and len(window_feet) >= 8:
        after = window_feet[np.clip(np.searchsorted(window_feet, events[good] + 0.05), 0, len(window_feet) - 1)] - events[good]
        after = after[(after > 0.05) & (after < 0.45)]
        if len(after) >= 8:
            transit = float(np.median(after))
            spread = float(np.clip(1.4826 * np.median(np.abs(after - transit)), 0.004, 0.04))
    return usual, picture, transit, spread


def _followed(events: Floats, loudness: Floats, feet: Floats) -> NDArray[np.bool_]:
    """Which event is the loudest of those 0.05 to 0.45 s before an upstroke."""
    teach = np.zeros(len(events), dtype=bool)
    first, last = np.searchsorted(events, feet - 0.45), np.searchsorted(events, feet - 0.05)
    for low, high in zip(first, last, strict=True):
        if high > low:
            teach[low + int(np.argmax(loudness[low:high]))] = True
    return teach
