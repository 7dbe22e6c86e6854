"""The picture of a minute's QRS complex, how complexes lie on it, and where in a complex R is."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from caval.recording import Signal
from caval.stages._signal import cut, moving_mean, refine, refine_rows

__all__ = ["Shapes", "forms", "own_place", "qrs_picture", "unit"]

Floats = NDArray[np.float64]

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
_BAND_EXCESS = 2.8
"""Noise in the QRS band at 125 Hz: samples that hang together, 125 / (2 · 22 Hz)."""
_LEAST_BEATS = 8


@dataclass(frozen=True, eq=False)
class Shapes:
    """The QRS band around each event: rows of `wide` hold the picture's length and the shift either way; `norm` that of each shift."""

    wide: Floats
    norm: Floats
    shift: int
    rate: float

    @classmethod
    def of(cls, band: Floats, place: NDArray[np.int64], rate: float) -> Shapes:
        half, shift = round(_HALF_PICTURE_S * rate), round(_SHIFT_S * rate)
        wide = cut(band, place - half - shift, 2 * (half + shift) + 1)
        power = np.cumsum(np.pad(wide**2, ((0, 0), (1, 0))), axis=1)
        length = 2 * half + 1
        return cls(wide, np.sqrt(np.maximum(power[:, length:] - power[:, :-length], 0.0)) + 1e-12, shift, rate)

    def part(self, which: slice | NDArray) -> Shapes:
        return Shapes(self.wide[which], self.norm[which], self.shift, self.rate)

    def lie_on(self, picture: Floats) -> tuple[Floats, Floats, Floats]:
        """Shift (samples) at which each lies best on the picture (unit norm), the correlation there, and the error of that place, s.

        The error is that of a matched filter: noise over slope. The noise is what the picture leaves unexplained.
        """
        match = np.stack([self.wide[:, k : k + len(picture)] @ picture for k in range(2 * self.shift + 1)], axis=1)
        likeness = match / self.norm
        best = likeness.argmax(axis=1)
        rows = np.arange(len(best))
        top = likeness[rows, best]
        left = np.sqrt(np.maximum(1.0 - np.clip(top, 0.0, 1.0) ** 2, 0.0) / len(picture))
        slope = np.linalg.norm(np.gradient(picture))
        error = np.sqrt(_BAND_EXCESS) * left / (np.maximum(top, 0.05) * slope)
        return best - self.shift + refine_rows(likeness, best), top, np.hypot(error / self.rate, _FINEST_S)

    def laid(self, shift: Floats) -> Floats:
        """The picture's stretch of each at its (whole) shift, unit norm, shape (n, length)."""
        start = np.rint(shift).astype(int) + self.shift
        length = self.wide.shape[1] - 2 * self.shift
        rows = np.arange(len(start))
        return self.wide[rows[:, None], start[:, None] + np.arange(length)] / self.norm[rows, start][:, None]


def qrs_picture(
    events: Floats, size: Floats, teachers: NDArray[np.int64], shapes: Shapes, cleaned: Signal, thin: Signal
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
    picture = unit(np.median(laid[alike[alike.sum(axis=1).argmax()]], axis=0))  # the commonest shape, not a mean of several
    for _ in range(2):
        shift, likeness, _ = some.lie_on(picture)
        alike = likeness > 0.8
        if alike.sum() < 3:
            return picture, 0.0, events[fair]
        picture = unit(np.median(some.laid(shift)[alike], axis=0))
    shift, likeness, _ = some.lie_on(picture)
    good = likeness >= min(0.8, float(np.median(likeness)))
    middle_s = (np.rint(thin.position(events[fair[good]])) + shift[good]) / thin.sampling_rate + thin.start_s
    return picture, _tip(cleaned, middle_s), middle_s


def forms(thin: Signal, middle_s: Floats) -> Floats:
    """The whole complex (0.12 s either way, all its frequencies, less the line between its ends), unit norm, a row each."""
    half = round(_OWN_HALF_S * thin.sampling_rate)
    windows = cut(thin.values, np.rint(thin.position(middle_s)).astype(int) - half, 2 * half + 1)
    left, right = windows[:, :3].mean(axis=1), windows[:, -3:].mean(axis=1)
    windows = windows - left[:, None] - (right - left)[:, None] * np.linspace(0.0, 1.0, 2 * half + 1)
    return windows / (np.linalg.norm(windows, axis=1, keepdims=True) + 1e-12)


def unit(picture: Floats) -> Floats:
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


def own_place(thin: Signal, energy: Floats, place: NDArray[np.int64]) -> tuple[Floats, Floats]:
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
        step = _cut_rows(size, peak - 1, 3).argmax(axis=1) - 1
        peak = np.clip(peak + step, 0, 2 * half)
    return middle - half + peak + refine_rows(size, peak), size[rows, peak]


def _cut_rows(values: Floats, starts: NDArray[np.int64], length: int) -> Floats:
    """From each row of `values` the stretch from its start, shape (n, length); ends repeated."""
    index = np.clip(starts[:, None] + np.arange(length), 0, values.shape[1] - 1)
    return np.take_along_axis(values, index, axis=1)
