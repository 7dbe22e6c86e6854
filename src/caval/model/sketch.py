"""A short drawn record with known truth, for the demo and for tests: shapes, not mechanics.

Every beat is a sum of smooth bumps on the venous trace, an ECG of Gaussian waves (the shape of the model of McSharry et al.,
IEEE Trans Biomed Eng 2003;50:289, in time instead of phase) and an arterial pulse with a notch. Mechanical ventilation moves the
venous baseline. The circulation model replaces it where waves must come out of volumes and compliances.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval.errors import InputError
from caval.recording import Calibration, Recording

__all__ = ["Sketch", "sketch"]


@dataclass(frozen=True, eq=False)
class Sketch:
    """A drawn record and its truth: R times (s, shape (n,)) and marks (``time_s, mark, beat, pressure_mmhg``; noise-free extrema)."""

    recording: Recording
    r_times_s: NDArray[np.float64]
    marks: pd.DataFrame


# wave: (place after R in s: fixed part, share of the interval that is left; height in mmHg; width (SD) in s)
_BUMPS = {
    "a": (-0.065, 0.0, 3.2, 0.045),
    "c": (0.105, 0.0, 1.6, 0.030),
    "x": (0.235, 0.0, -3.0, 0.070),
    "v": (0.375, 0.09, 2.4, 0.070),
    "y": (0.500, 0.12, -2.0, 0.070),
}
_ECG_BUMPS = ((-0.16, 0.12, 0.022), (-0.030, -0.10, 0.010), (0.0, 1.0, 0.011), (0.030, -0.22, 0.011), (0.28, 0.25, 0.045))  # mV


def sketch(
    *,
    minutes: float = 2.0,
    heart_rate: float = 72.0,
    variability: float = 0.03,
    mean_mmhg: float = 7.0,
    breath_s: float = 5.0,
    swing_mmhg: float = 1.2,
    noise_mmhg: float = 0.05,
    ecg_rate: float = 500.0,
    pressure_rate: float = 125.0,
    heights: Mapping[str, float] | None = None,
    events: bool = True,
    seed: int = 1,
) -> Sketch:
    """Draw a record: ECG (mV), CVP and ABP (mmHg), stored as 16-bit integers as a monitor would.

    Parameters
    ----------
    minutes, heart_rate (1/min), variability (SD of RR over its mean), mean_mmhg, breath_s, swing_mmhg, noise_mmhg
        The scene; `breath_s` is the length of a ventilator cycle and `swing_mmhg` what it adds at its height.
    ecg_rate, pressure_rate : float
        Hz.
    heights : mapping of str to float, optional
        Height of a wave's bump in mmHg where it is to differ from the usual: ``{"a": 0.0}`` draws an atrium that does not contract.
    events : bool
        With diathermy on the ECG, a flush of the venous line and a short clotted stretch, where the record is long enough.
    seed : int
        The same seed gives the same record.

    Raises
    ------
    InputError
        A length, rate or heart rate that is not above 0; a wave that is not drawn.
    """
    for wave in heights or {}:
        if wave not in _BUMPS:
            raise InputError(f"heights: no wave {wave!r}; waves are: {', '.join(_BUMPS)}")
    for name, value in (("minutes", minutes), ("heart_rate", heart_rate), ("ecg_rate", ecg_rate), ("pressure_rate", pressure_rate)):
        if not value > 0:
            raise InputError(f"{name} = {value!r}: it must be above 0")
    rng = np.random.default_rng(seed)
    duration_s = minutes * 60.0
    rr = 60.0 / heart_rate * (1.0 + variability * rng.standard_normal(int(duration_s * heart_rate / 60 * 1.5) + 8))
    r = -0.3 + np.cumsum(np.clip(rr, 0.25, None))
    r = r[r < duration_s + 2.0]
    interval = np.diff(r, append=r[-1] + 60.0 / heart_rate)

    ecg_time = np.arange(round(duration_s * ecg_rate)) / ecg_rate
    ecg = sum((_draw(ecg_time, r + place, height, width) for place, height, width in _ECG_BUMPS), np.zeros_like(ecg_time))
    ecg += 0.02 * rng.standard_normal(len(ecg_time)) + 0.05 * np.sin(2 * np.pi * ecg_time / breath_s)

    time = np.arange(round(duration_s * pressure_rate)) / pressure_rate
    breath = mean_mmhg + swing_mmhg * np.clip(np.sin(2 * np.pi * time / breath_s), 0, None) ** 0.7
    cvp = np.zeros_like(time)
    narrow = min(1.0, 1.25 * 60.0 / heart_rate)  # in tachycardia the waves are shorter, or they would run into one another
    bumps = {w: (fixed, share, (heights or {}).get(w, height), narrow * width) for w, (fixed, share, height, width) in _BUMPS.items()}
    for fixed, share, height, width in bumps.values():
        cvp += _draw(time, r + fixed + share * (interval - 0.3), height, width)
    cvp += breath
    marks = _truth(time, cvp, r, interval, bumps)
    cvp = cvp + noise_mmhg * rng.standard_normal(len(time))

    abp = 62.0 + _pulse(time, r + 0.18, interval) + 2.0 * np.sin(2 * np.pi * time / breath_s) + 0.3 * rng.standard_normal(len(time))
    if events and duration_s >= 60:
        _spoil(ecg, ecg_rate, cvp, pressure_rate, duration_s, rng)

    calibrations = {
        "ECG II": Calibration(-32767, 32767, -32.767, 32.767),
        "CVP": Calibration(-32767, 32767, -327.67, 327.67),
        "ABP": Calibration(-32767, 32767, -327.67, 327.67),
    }
    arrays = {
        "ECG II": (calibrations["ECG II"].to_digital(ecg).astype(np.int16), ecg_rate, "mV"),
        "CVP": (calibrations["CVP"].to_digital(cvp).astype(np.int16), pressure_rate, "mmHg"),
        "ABP": (calibrations["ABP"].to_digital(abp).astype(np.int16), pressure_rate, "mmHg"),
    }
    inside = (r >= 0) & (r < duration_s)
    marks = marks[(marks["beat"] >= inside.argmax()) & (marks["beat"] < inside.argmax() + inside.sum())]
    marks = marks.assign(beat=marks["beat"] - inside.argmax())
    return Sketch(Recording.from_arrays(arrays, name="demo", calibrations=calibrations), r[inside], marks.reset_index(drop=True))


def _draw(time: NDArray, centres: NDArray, height: float, width: float) -> NDArray[np.float64]:
    """Sum of Gaussian bumps; each is written only where it is not nothing."""
    out = np.zeros_like(time)
    rate = 1.0 / (time[1] - time[0]) if len(time) > 1 else 1.0
    reach = int(5 * width * rate) + 2
    offsets = np.arange(-reach, reach + 1)
    middle = np.rint(centres * rate).astype(int)
    index = middle[:, None] + offsets
    bump = height * np.exp(-0.5 * ((index / rate - centres[:, None]) / width) ** 2)
    inside = (index >= 0) & (index < len(time))
    np.add.at(out, index[inside], bump[inside])
    return out


def _pulse(time: NDArray, onset: NDArray, interval: NDArray) -> NDArray[np.float64]:
    """Arterial pulses above the diastolic level, with a notch; run-off restarts at every upstroke."""
    beat = np.clip(np.searchsorted(onset, time, side="right") - 1, 0, len(onset) - 1)
    since = np.clip(time - onset[beat], 0, None)
    rise = 1.0 / (1.0 + np.exp(-(since - 0.07) / 0.016))
    height = 58.0 * np.clip(interval[beat] / np.median(interval), 0.6, 1.3)
    notch = 5.0 * np.exp(-0.5 * ((since - 0.33) / 0.015) ** 2)
    last = np.exp(-np.clip(interval[beat] - 0.10, 0.1, None) / 0.42)
    run_off = (np.exp(-np.clip(since - 0.10, 0, None) / 0.42) - last) / (1 - last)  # reaches the diastolic level at the next upstroke
    return np.where(time < onset[0], 0.0, height * rise * np.clip(run_off, 0, None) - notch)


def _truth(
    time: NDArray, clean: NDArray, r: NDArray, interval: NDArray, bumps: Mapping[str, tuple[float, float, float, float]]
) -> pd.DataFrame:
    """Extrema of the noise-free trace nearest each bump, no farther than 60 ms; a bump without one is left out (fused)."""
    step = time[1] - time[0] if len(time) > 1 else 1.0
    rising = np.diff(clean) > 0
    peaks = np.flatnonzero(rising[:-1] & ~rising[1:]) + 1
    troughs = np.flatnonzero(~rising[:-1] & rising[1:]) + 1
    rows = []
    for wave, (fixed, share, height, _) in bumps.items():
        extrema = peaks if height > 0 else troughs
        if height == 0 or not len(extrema):
            continue
        place = r + fixed + share * (interval - 0.3)
        near = extrema[np.clip(np.searchsorted(extrema, place / step), 1, len(extrema) - 1)[:, None] + np.array([-1, 0])]
        best = near[np.arange(len(r)), np.abs(near * step - place[:, None]).argmin(axis=1)]
        good = (np.abs(best * step - place) < 0.06) & (place > 0) & (place < time[-1])
        found = {"time_s": best[good] * step, "mark": wave, "beat": np.flatnonzero(good), "pressure_mmhg": clean[best[good]]}
        rows.append(pd.DataFrame(found))
    empty = pd.DataFrame({"time_s": [], "mark": [], "beat": [], "pressure_mmhg": []}).astype({"mark": object, "beat": np.int64})
    return pd.concat(rows or [empty]).sort_values("time_s", kind="stable", ignore_index=True)


def _spoil(ecg: NDArray, ecg_rate: float, cvp: NDArray, rate: float, duration_s: float, rng: np.random.Generator) -> None:
    """Diathermy on the ECG, a flush and a flat stretch on the venous line, in place."""
    start = round(duration_s * 0.30 * ecg_rate)
    length = round(6 * ecg_rate)
    ecg[start : start + length] += 1.5 * rng.standard_normal(length) * np.abs(np.sin(np.arange(length) / ecg_rate * 3))
    flush = round(duration_s * 0.55 * rate)
    cvp[flush : flush + round(1.5 * rate)] = 300.0
    ring = np.arange(round(0.6 * rate)) / rate
    cvp[flush + round(1.5 * rate) : flush + round(1.5 * rate) + len(ring)] += 60 * np.exp(-ring * 12) * np.cos(2 * np.pi * 9 * ring)
    flat = round(duration_s * 0.80 * rate)
    cvp[flat : flat + round(5 * rate)] = cvp[flat]
