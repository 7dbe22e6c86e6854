"""An ECG for a given rhythm, after the dynamical model of McSharry, Clifford, Tarassenko and Smith.

In that model (IEEE Trans Biomed Eng 2003;50:289) a point runs round a circle and is pushed up and down as it passes the angles of
P, Q, R, S and T::

    dz/dt = - Σ aᵢ Δθᵢ exp(-Δθᵢ²/2bᵢ²) - (z - z₀),        Δθᵢ = θ - θᵢ

Each push integrates to a Gaussian of height aᵢbᵢ²/ω and width bᵢ, and the last term is a high-pass with a time constant of 1 s; both
are written here in closed form, so that an hour takes seconds. Table of the model (from memory): θ -60°, -15°, 0, 15°, 90°;
a 1.2, -5, 30, -7.5, 0.75; b 0.25, 0.1, 0.1, 0.1, 0.4 for P, Q, R, S, T at 60 beats a minute.

Departures. The angle is not integrated: it is 0 at each given R, Q, R and S turn at the speed of 60/min whatever the rate (a QRS does
not widen in a slow beat), and T turns with the square root of the interval before it (Bazett). Heights do not fall with the rate, and
are scaled so that R has `r_mv`. P belongs to its own atrial activation and not to the R after it, so it marches through when the two are
dissociated; it is narrowed to b = 0.17, a P wave of 0.11 s and a tenth of R. A beat of the ventricle is wide, with T against it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from caval.errors import InputError
from caval.model.rhythm import Rhythm

__all__ = ["ecg", "spike_times_s"]

_TURN_S = 1.0 / (2 * np.pi)  # seconds a radian at 60 beats a minute


@dataclass(frozen=True)
class _Wave:
    """A Gaussian: place after R (or after the atrial activation) in s, height as a share of R, width (SD) in s."""

    place_s: float
    height: float
    width_s: float

    @classmethod
    def of(cls, degrees: float, a: float, b: float) -> _Wave:
        return cls(np.deg2rad(degrees) * _TURN_S, a * b**2 / (30.0 * 0.1**2), b * _TURN_S)


_QRS = (_Wave.of(-15, -5.0, 0.1), _Wave.of(0, 30.0, 0.1), _Wave.of(15, -7.5, 0.1))
_T = _Wave.of(90, 0.75, 0.4)
_P = _Wave(0.055, _Wave.of(0, 1.2, 0.17).height, 0.17 * _TURN_S)
_P_RETROGRADE = _Wave(0.045, -0.8 * _P.height, 0.8 * _P.width_s)  # runs away from lead II, through less of the atrium at a time
# Beats that start in a ventricle: our choice of shape, after the look of such beats in lead II. The shoulder before R and the S after it
# pull the peak forward by 3.1 ms, which is put right here, so that it stands at 0.
_WIDE_QRS = (_Wave(-0.0419, 0.25, 0.022), _Wave(0.0031, 1.15, 0.030), _Wave(0.0831, -0.35, 0.028))
_WIDE_T = _Wave(0.32, -0.40, 0.060)
_WIDE = ("premature", "paced", "escape")
_SPIKE_LEAD_S = 0.10
_HIGH_PASS_S = 1.0
_REACH = 5.5  # widths beyond which a Gaussian is nothing (3e-7 of its height)


def ecg(
    rhythm: Rhythm,
    duration_s: float | None = None,
    sampling_rate: float = 500.0,
    *,
    r_mv: float = 1.0,
    fibrillation_mv: float = 0.06,
    spike_mv: float = 0.6,
    breath: NDArray[np.float64] | None = None,
    breath_rate: float = 15.0,
    breath_share: float = 0.06,
    wander_mv: float = 0.04,
    noise_mv: float = 0.01,
    seed: int = 1,
) -> NDArray[np.float64]:
    """ECG, lead II in spirit, of a rhythm.

    Parameters
    ----------
    rhythm : Rhythm
        When atria and ventricles fire.
    duration_s : float, optional
        Seconds; the rhythm's own length by default.
    sampling_rate : float
        Hz, at least 100.
    r_mv : float
        Height of R in millivolts; every other wave scales with it.
    fibrillation_mv : float
        Amplitude of fibrillatory waves: a sawtooth of wandering frequency, 4 to 8 Hz, and size (after Stridh and Sörnmo 2001, from memory).
    spike_mv : float
        Height of the pacing spike, one sample wide, 0.10 s before the peak of a paced R; 0 for none.
    breath : float64 array, shape (n,), optional
        Depth of breath at each sample, 0 at end-expiration and 1 at end-inspiration; without it, a sine of `breath_rate` a minute.
    breath_share, wander_mv : float
        What a full breath takes from the height of every wave, as a share, and adds to the baseline.
    noise_mv : float
        Standard deviation of white noise.
    seed : int
        Of noise and fibrillatory waves.

    Returns
    -------
    float64 array, shape (round(duration_s * sampling_rate),)
        Millivolts; sample i stands at ``i / sampling_rate`` seconds. R stands at its given time to within a sample.

    Raises
    ------
    InputError
        A value outside its range; a `breath` of another length.

    Examples
    --------
    >>> from caval.model.rhythm import rhythm
    >>> trace = ecg(rhythm("sinus", 10), noise_mv=0)
    >>> len(trace)
    5000
    """
    length_s = rhythm.duration_s if duration_s is None else duration_s
    for name, value, low, high in (
        ("duration_s", length_s, 1 / sampling_rate if sampling_rate > 0 else 0, np.inf), ("sampling_rate", sampling_rate, 100, np.inf),
        ("r_mv", r_mv, 0.05, 10), ("fibrillation_mv", fibrillation_mv, 0, 1), ("spike_mv", spike_mv, 0, 20),
        ("breath_share", breath_share, 0, 0.5), ("wander_mv", wander_mv, 0, 5), ("noise_mv", noise_mv, 0, 5),
        ("breath_rate", breath_rate, 2, 80),
    ):
        if not low <= value <= high:
            allowed = f"at least {low:g}" if np.isinf(high) else f"between {low:g} and {high:g}"
            raise InputError(f"{name} = {value!r}: it must be {allowed}")
    n = round(length_s * sampling_rate)
    time = np.arange(n) / sampling_rate
    if breath is None:
        breath = 0.5 - 0.5 * np.cos(2 * np.pi * breath_rate / 60.0 * time)
    elif len(breath) != n:
        raise InputError(f"breath of {len(breath)} samples; the ECG has {n} ({length_s:g} s at {sampling_rate:g} Hz)")
    noise_rng, wave_rng = np.random.default_rng(seed).spawn(2)

    trace = np.zeros(n)
    _draw_beats(trace, rhythm, sampling_rate)
    trace = r_mv * (1.0 - breath_share * breath) * _relaxed(trace, 1.0 / sampling_rate)
    if fibrillation_mv:
        trace += fibrillation_mv * r_mv * _fibrillatory(time, rhythm, wave_rng)
    trace += wander_mv * (breath - 0.5)
    if noise_mv:
        trace += noise_mv * noise_rng.standard_normal(n)
    spikes = np.rint(spike_times_s(rhythm) * sampling_rate).astype(np.int64)
    trace[spikes[(spikes >= 0) & (spikes < n)]] += spike_mv
    return trace


def spike_times_s(rhythm: Rhythm) -> NDArray[np.float64]:
    """Times of the pacing spikes, seconds, one for each paced beat."""
    return rhythm.r_times_s[rhythm.r_kind == "paced"] - _SPIKE_LEAD_S


def _draw_beats(trace: NDArray[np.float64], rhythm: Rhythm, rate: float) -> None:
    """Add every wave of every beat, as shares of R, in place."""
    wide = np.isin(rhythm.r_kind, _WIDE)
    r, rr = rhythm.r_times_s, rhythm.rr_s
    usual = float(np.nanmedian(rr)) if len(rr) > 1 else 1.0
    # T goes with the mean of this interval and the usual one: repolarisation follows a change of rate slowly.
    stretch = np.sqrt(np.clip(0.5 * (np.where(np.isnan(rr), usual, rr) + usual), 0.3, 1.5))
    for waves, t_wave, those in ((_QRS, _T, ~wide), (_WIDE_QRS, _WIDE_T, wide)):
        for wave in waves:
            _add(trace, rate, r[those] + wave.place_s, wave.height, np.full(those.sum(), wave.width_s))
        _add(trace, rate, r[those] + t_wave.place_s * stretch[those], t_wave.height, t_wave.width_s * stretch[those])
    backwards = rhythm.p_kind == "retrograde"
    for wave, those in ((_P, ~backwards), (_P_RETROGRADE, backwards)):
        _add(trace, rate, rhythm.p_times_s[those] + wave.place_s, wave.height, np.full(those.sum(), wave.width_s))


def _add(trace: NDArray[np.float64], rate: float, centres: NDArray, height: float, widths: NDArray) -> None:
    """Add a Gaussian at each centre (s), in place."""
    if not len(centres):
        return
    reach = int(np.ceil(_REACH * widths.max() * rate))
    index = np.rint(centres * rate).astype(np.int64)[:, None] + np.arange(-reach, reach + 1)
    values = height * np.exp(-0.5 * ((index / rate - centres[:, None]) / widths[:, None]) ** 2)
    inside = (index >= 0) & (index < len(trace))
    trace += np.bincount(index[inside], values[inside], minlength=len(trace))


def _relaxed(pushed: NDArray[np.float64], step_s: float) -> NDArray[np.float64]:
    """The model's pull back to the baseline: z' = g' - z, solved for g straight between samples; starts near balance."""
    from scipy.signal import lfilter

    level = pushed[: max(1, round(3.0 / step_s))].mean()
    keep = np.exp(-step_s / _HIGH_PASS_S)
    gain = (1 - keep) * _HIGH_PASS_S / step_s
    return lfilter([gain, -gain], [1.0, -keep], pushed, zi=[-gain * level])[0]


def _fibrillatory(time: NDArray[np.float64], rhythm: Rhythm, rng: np.random.Generator) -> NDArray[np.float64]:
    """Fibrillatory waves of amplitude about 1 where the atria fibrillate, faded over 0.2 s, else 0."""
    shape = np.zeros(len(time))
    for start, stop in rhythm.spans_of("fibrillation"):
        edge = 0.2 if start > 0 else 1e-9
        last = 0.2 if stop < rhythm.duration_s else 1e-9
        shape += np.clip((time - start) / edge, 0, 1) * np.clip((stop - time) / last, 0, 1)
    if not shape.any():
        return shape
    knots = np.arange(0.0, time[-1] + 1.0, 0.5)
    drift = np.cumsum(rng.standard_normal(len(knots)))
    frequency = 6.0 + 0.5 * np.sin(drift * 0.6) + 0.3 * rng.standard_normal(len(knots)).clip(-2, 2)
    size = 1.0 + 0.35 * rng.standard_normal(len(knots)).clip(-2, 2)
    phase = 2 * np.pi * np.cumsum(np.interp(time, knots, frequency)) * (time[1] - time[0] if len(time) > 1 else 0.0)
    saw = sum((np.sin(m * phase) / m for m in (1, 2, 3)), np.zeros(len(time)))
    return shape * np.interp(time, knots, size) * saw * (2 / np.pi)
