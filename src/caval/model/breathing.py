"""What reaches the circulation from outside: the pressures of breathing, and volume given or taken."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from caval.errors import InputError

__all__ = ["Breathing", "Infusion", "pressures"]

Floats = NDArray[np.float64]

_MMHG_PER_CMH2O = 0.735559


@dataclass(frozen=True)
class Infusion:
    """Volume given (or, negative, taken) at an even rate into the upper-body veins."""

    onset_s: float
    duration_s: float
    volume_ml: float

    def __post_init__(self) -> None:
        for name, low, high, unit in (("onset_s", -1e6, 1e6, "s"), ("duration_s", 0.01, 1e6, "s"), ("volume_ml", -5000.0, 20000.0, "ml")):
            if not low <= getattr(self, name) <= high:
                raise InputError(f"infusions.{name} = {getattr(self, name)!r}: allowed are {low:g} to {high:g} {unit}")

    def rate_ml_s(self, time_s: Floats) -> Floats:
        """Inflow at times in seconds."""
        during = (time_s >= self.onset_s) & (time_s < self.onset_s + self.duration_s)
        return np.where(during, self.volume_ml / self.duration_s, 0.0)


@dataclass(frozen=True)
class Breathing:
    """Pleural, abdominal and airway pressure over time.

    Spontaneous breaths lower the pleural pressure by `swing_mmhg`; a ventilator raises the airway pressure from `peep_cmh2o` by
    `drive_cmh2o`, of which the share `transmitted` reaches the pleura. A third of the pleural movement reaches the abdomen, with
    opposite sign in spontaneous breaths (the diaphragm).
    """

    mode: str = "spontaneous"
    rate_per_min: float = 15.0
    inspiration_s: float = 1.6
    swing_mmhg: float = 4.0
    pleural_mmhg: float = -4.0
    peep_cmh2o: float = 5.0
    drive_cmh2o: float = 12.0
    transmitted: float = 0.35

    def __post_init__(self) -> None:
        if self.mode not in ("spontaneous", "ventilated", "none"):
            raise InputError(f"breathing.mode = {self.mode!r}: allowed are spontaneous, ventilated, none")
        for name, low, high, unit in (
            ("rate_per_min", 2, 80, "1/min"), ("inspiration_s", 0.2, 20, "s"), ("swing_mmhg", 0, 40, "mmHg"),
            ("pleural_mmhg", -20, 20, "mmHg"), ("peep_cmh2o", 0, 30, "cmH2O"), ("drive_cmh2o", 0, 60, "cmH2O"), ("transmitted", 0, 1, ""),
        ):
            if not low <= getattr(self, name) <= high:
                raise InputError(f"breathing.{name} = {getattr(self, name)!r}: allowed are {low:g} to {high:g} {unit}".rstrip())
        if self.inspiration_s > 0.9 * 60.0 / self.rate_per_min:
            period = 60.0 / self.rate_per_min
            raise InputError(f"breathing.inspiration_s = {self.inspiration_s:g}: longer than nine tenths of a breath ({period:g} s)")

    def starts_s(self, start_s: float, stop_s: float) -> Floats:
        """Onset of every inspiration in ``[start_s, stop_s)``."""
        if self.mode == "none":
            return np.empty(0)
        period = 60.0 / self.rate_per_min
        return np.asarray(np.arange(np.ceil(start_s / period), np.ceil(stop_s / period)) * period, dtype=np.float64)

    def pressures(self, time_s: Floats) -> tuple[Floats, Floats, Floats]:
        """Pleural, abdominal and airway pressure, mmHg, at times in seconds; a breath begins at 0 s."""
        share = self._shape(time_s)
        if self.mode == "spontaneous":
            pleural = self.pleural_mmhg - self.swing_mmhg * share
            return pleural, self.swing_mmhg * share / 3.0, np.zeros_like(time_s)
        if self.mode == "ventilated":
            airway = np.asarray((self.peep_cmh2o + self.drive_cmh2o * share) * _MMHG_PER_CMH2O, dtype=np.float64)
            pleural = self.pleural_mmhg + self.transmitted * airway
            return pleural, self.transmitted * airway / 3.0, airway
        return np.full_like(time_s, self.pleural_mmhg), np.zeros_like(time_s), np.zeros_like(time_s)

    def _shape(self, time_s: Floats) -> Floats:
        """0 at the end of expiration, 1 at the end of inspiration; smooth up, exponential down."""
        period = 60.0 / self.rate_per_min
        phase = np.mod(time_s, period)
        up = 0.5 * (1 - np.cos(np.pi * np.clip(phase / self.inspiration_s, 0, 1)))
        rest = np.clip(phase - self.inspiration_s, 0, None)
        fade = np.exp(-rest / 0.35) * np.clip((period - phase) / 0.2, 0, 1)
        return np.where(phase < self.inspiration_s, up, fade)


def pressures(breathing: Sequence[tuple[float, Breathing]], time_s: Floats) -> tuple[Floats, Floats, Floats]:
    """Pleural, abdominal and airway pressure, mmHg, of breathing patterns by their onset; the first reaches back without end."""
    pleural, abdominal, airway = breathing[0][1].pressures(time_s)
    for onset_s, later in breathing[1:]:
        if len(time_s) and time_s[-1] >= onset_s:
            since = time_s >= onset_s
            new = later.pressures(time_s)
            pleural, abdominal, airway = (np.where(since, b, a) for a, b in zip((pleural, abdominal, airway), new, strict=True))
    return pleural, abdominal, airway
