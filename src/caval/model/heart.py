"""How atria, ventricles and the valve ring are activated over time, from the times of P and R alone."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from caval.errors import InputError
from caval.model.parameters import Heart

__all__ = ["Activation"]

Floats = NDArray[np.float64]

_LONGEST = 0.5
"""Of the interval, what an atrial contraction may take (calibrated: no limit below 150/min, where a and c must run together)."""
_RING_PEAK, _RING_END = 0.7, 1.4  # of the ventricle's time to peak


@dataclass(frozen=True, eq=False)
class Activation:
    """Onsets and lengths of every contraction, seconds, sorted; curves by `atrium`, `ventricle` and `ring`, each 0 to 1."""

    atrial_onset: Floats
    atrial_length: Floats
    ventricular_onset: Floats
    ventricular_peak: Floats

    @classmethod
    def of(cls, heart: Heart, p_times_s: ArrayLike, r_times_s: ArrayLike) -> Activation:
        """Contractions of given P and R times.

        A ventricular one lasts longer after a longer interval, with its square root; an atrial one keeps its length, as far as half of the
        interval goes.

        Raises
        ------
        InputError
            No R time, or a time that is not finite.
        """
        p, r = _times("p_times_s", p_times_s), _times("r_times_s", r_times_s)
        if not len(r):
            raise InputError("r_times_s is empty: a heart that never beats keeps no circulation")
        atrial = np.minimum(heart.atrium_length_s, _LONGEST * np.maximum(_before(p), 0.1))
        ventricular = np.sqrt(np.clip(_before(r), 0.3, 1.5))
        return cls(p + heart.atrium_delay_s, atrial, r + heart.ventricle_delay_s, heart.ventricle_peak_s * ventricular)

    def atrium(self, time_s: Floats) -> Floats:
        """Atrial contraction: a smooth hump; all 0 without P."""
        beat, since = _since(time_s, self.atrial_onset)
        if not len(self.atrial_onset):
            return np.zeros_like(time_s)
        return 0.5 * (1 - np.cos(2 * np.pi * np.clip(since / self.atrial_length[beat], 0, 1)))

    def ventricle(self, time_s: Floats) -> Floats:
        """Normalised elastance of the ventricles (Stergiopulos et al. 1996); of two beats that overlap the stronger counts."""
        out = np.zeros_like(time_s)
        for lag in (0, 1):
            beat, since = _since(time_s, self.ventricular_onset, lag)
            share = since / self.ventricular_peak[beat]
            up = (share / 0.7) ** 1.9
            down = np.minimum(share / 1.173, 50.0) ** 21.9
            out = np.maximum(out, 1.55 * up / (1 + up) / (1 + down))
        return out

    def ring(self, time_s: Floats) -> Floats:
        """Pull of the long-axis fibres on the valve ring: greatest before the ventricle's tension is, gone as filling begins.

        The shape (a cosine hump over 0 to 1.4 times the time to peak, highest at 0.7 of it) is calibrated to the place of x and the
        width of v.
        """
        beat, since = _since(time_s, self.ventricular_onset)
        share = since / self.ventricular_peak[beat]
        up = np.sin(0.5 * np.pi * np.clip(share / _RING_PEAK, 0, 1)) ** 2
        return up * np.cos(0.5 * np.pi * np.clip((share - _RING_PEAK) / (_RING_END - _RING_PEAK), 0, 1)) ** 2


def _times(name: str, values: ArrayLike) -> Floats:
    times = np.sort(np.asarray(values, dtype=np.float64).ravel())
    if not np.isfinite(times).all():
        raise InputError(f"{name} holds a time that is not finite; leave out what did not happen")
    return times


def _since(time_s: Floats, onset: Floats, lag: int = 0) -> tuple[NDArray[np.int64], Floats]:
    """The contraction that began last before each time (with `lag` 1 the one before it), and how long ago; 0 s before the first."""
    beat = np.searchsorted(onset, time_s, "right") - 1 - lag
    known = np.maximum(beat, 0)
    if not len(onset):
        return known, np.zeros_like(time_s)
    return known, np.where(beat >= 0, time_s - onset[known], 0.0)


def _before(times: Floats) -> Floats:
    """Interval before each event; the first has that of the second."""
    if len(times) < 2:
        return np.full(len(times), 0.85)
    gaps = np.diff(times, prepend=0.0)
    gaps[0] = gaps[1]
    return gaps
