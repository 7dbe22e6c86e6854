"""How channels are laid into the data records of an EDF or BDF file."""

from __future__ import annotations

from dataclasses import dataclass, replace
from fractions import Fraction
from math import lcm

import numpy as np
from numpy.typing import NDArray

from caval.errors import InputError
from caval.recording import Calibration, Channel, Recording
from caval_edf.header import number_field, plain

__all__ = ["Plan", "calibration_for", "plan_channel", "record_duration"]

_RECORD_BYTES = 61440
"""A data record should not be longer (EDF, additional specification 1); longer ones are written only when the rates leave no choice."""
_LONGEST_RECORD_S = 1000
_MOST_TRIED = 4096
_WORST_STEPS = 0.5
"""A limit may be off by this part of a stored step at the very ends of the range, not more."""


@dataclass(frozen=True, eq=False)
class Plan:
    """How a channel is laid into the file. `holes` are the sample ranges without a value."""

    channel: Channel
    per_record: int
    calibration: Calibration
    holes: NDArray[np.int64]

    def integers(self, start: int, stop: int) -> NDArray:
        """Stored integers of ``[start, stop)``; past the end, the last one repeated."""
        n = self.channel.n_samples
        values = self.channel.digital(min(start, n), min(stop, n))
        if self.channel.calibration is None:
            values = self.calibration.to_digital(values)
        elif self.channel.calibration != self.calibration:  # only the missing code lies outside
            values = np.clip(values, self.calibration.digital_min, self.calibration.digital_max)
        if len(values) < stop - start:
            last = values[-1] if len(values) else (self.integers(n - 1, n)[0] if n else 0)
            values = np.concatenate([values, np.full(stop - start - len(values), last, dtype=values.dtype)])
        return values


def _rate(channel: Channel) -> Fraction:
    return Fraction(channel.sampling_rate).limit_denominator(10**6)


def record_duration(recording: Recording) -> Fraction:
    """Seconds a data record: the source's own where it still fits, else the first of the usual ones that does.

    What fits gives every channel whole samples a data record; better, whole data records too; better still, short ones.
    """
    rates = [_rate(c) for c in recording.channels]
    usual = [Fraction(1), *(Fraction(1, n) for n in (2, 4, 5, 10, 20, 25, 50, 100)), *(Fraction(n) for n in (2, 4, 5, 10))]
    candidates = [*_own_duration(recording), *usual, Fraction(lcm(*(r.denominator for r in rates)))]
    fitting = [d for d in candidates if 0 < d <= _LONGEST_RECORD_S and all((r * d).denominator == 1 for r in rates)]
    if not fitting:
        listed = ", ".join(f"{c.label} {c.sampling_rate:.9g} Hz" for c in recording.channels)
        raise InputError(f"no data record of up to {_LONGEST_RECORD_S} s holds whole samples of every channel ({listed}); resample one")
    whole = [d for d in fitting if all(c.n_samples % int(r * d) == 0 for c, r in zip(recording.channels, rates, strict=True))]
    small = [d for d in (whole or fitting) if sum(int(r * d) for r in rates) * 2 < _RECORD_BYTES]
    return (small or whole or fitting)[0]


def _own_duration(recording: Recording) -> list[Fraction]:
    try:
        return [Fraction(recording.header["edf.record_duration"])]
    except (KeyError, ValueError, ZeroDivisionError):
        return []


def plan_channel(channel: Channel, duration_s: Fraction, sample_bytes: int) -> Plan:
    """How `channel` goes into data records of `duration_s`; InputError when its integers do not fit."""
    if plain(channel.label) in ("EDF Annotations", "BDF Annotations"):
        raise InputError(f"channel {channel.label!r}: readers take a signal of this name for annotations; rename it first")
    channel = _on_the_clock(channel)
    calibration = calibration_for(channel, sample_bytes)
    if calibration is None:
        needs = ".edf holds 16 bits, write .bdf instead" if sample_bytes == 2 else ".bdf holds 24 bits"
        raise InputError(f"channel {channel.label!r} stores integers that do not fit: {needs}")
    return Plan(channel, int(_rate(channel) * duration_s), calibration, channel.holes())


def calibration_for(channel: Channel, sample_bytes: int) -> Calibration | None:
    """The calibration to write: the channel's own line, its limits such that the file can hold them; None when the samples do not fit.

    EDF has 8 characters for a limit, and a rounded limit shifts every value. Limits whose text is exact are looked for inward, as far
    as the samples leave room.
    """
    half = 2 ** (8 * sample_bytes - 1)
    own = channel.integer_calibration(1 - half, half - 1)
    low, high = max(own.digital_min, -half), min(own.digital_max, half - 1)
    fits = (low, high) == (own.digital_min, own.digital_max)
    if fits and _limit(own, low)[1] == _limit(own, high)[1] == 0.0:
        return own
    lowest, highest = _extremes(channel, own, with_missing=fits and sample_bytes == 2)
    if lowest < low or highest > high:
        return None
    first, first_error = _best_limit(own, low, lowest)
    last, last_error = _best_limit(own, high, highest)
    if max(first_error, last_error) > _WORST_STEPS or first[0] >= last[0]:
        raise InputError(f"channel {channel.label!r}: EDF has 8 characters for a limit, too few for {own.scale!r} {channel.unit} a step")
    return Calibration(first[0], last[0], first[1], last[1])


def _limit(calibration: Calibration, code: int) -> tuple[tuple[int, float], float]:
    """A limit ``(code, value of its text)`` and what the text is off, in steps; 0 when it is nothing that counts."""
    value = calibration.physical_min + (code - calibration.digital_min) * calibration.scale
    text = float(number_field(value, "limit"))
    off = abs(text - value) / abs(calibration.scale)
    return (code, text), off if off > 1e-6 else 0.0


def _best_limit(calibration: Calibration, limit: int, extreme: int) -> tuple[tuple[int, float], float]:
    """The first limit inward whose text is exact, of a few thousand and the extreme of the samples; else the nearest to it."""
    best = _limit(calibration, extreme)
    for code in range(limit, extreme, 1 if extreme >= limit else -1)[:_MOST_TRIED]:
        tried = _limit(calibration, code)
        if tried[1] == 0.0:
            return tried
        best = min(best, tried, key=lambda found: found[1])
    return best


def _extremes(channel: Channel, calibration: Calibration, *, with_missing: bool) -> tuple[int, int]:
    """The lowest and highest stored code; those of the missing code left out on request. One step apart at least."""
    lowest, highest = calibration.digital_max, calibration.digital_min
    for _, stored in channel.blocks():
        if channel.calibration is None:
            stored = calibration.to_digital(stored[np.isfinite(stored)])
        elif calibration.missing is not None and not with_missing:
            stored = stored[stored != calibration.missing]
        if len(stored):
            lowest, highest = min(lowest, int(stored.min())), max(highest, int(stored.max()))
    if lowest < highest:
        return lowest, highest
    middle = lowest if lowest == highest else 0
    return (middle, middle + 1) if middle < calibration.digital_max else (middle - 1, middle)


def _on_the_clock(channel: Channel) -> Channel:
    """A channel whose sample 0 stands at 0 s."""
    shift = round(-channel.start_s * channel.sampling_rate)
    if shift == 0:
        return channel
    n_samples = max(0, channel.n_samples - shift)

    def source(start: int, stop: int) -> NDArray:
        stored = channel.digital(*(min(max(0, place + shift), channel.n_samples) for place in (start, stop)))
        ahead = stop - start - len(stored)  # samples before the first
        return np.concatenate([np.full(ahead, channel.digital(0, 1)[0], dtype=stored.dtype), stored]) if ahead else stored

    gaps = np.clip(channel.gaps - shift, 0, n_samples)
    if shift < 0:
        gaps = np.concatenate([[[0, -shift]], gaps])
    return replace(channel, n_samples=n_samples, source=source, start_s=0.0, gaps=gaps[gaps[:, 1] > gaps[:, 0]])
