"""What happens to a measuring line and to an ECG lead: flushes, zeroing, sampling, clots, movement, diathermy."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from caval.model._checks import within

__all__ = [
    "SPAN_KIND", "BloodSampling", "Clot", "Diathermy", "Disconnection", "Event", "Flush", "HeightStep", "Movement", "Zeroing", "spoil_ecg",
]


@dataclass(frozen=True)
class Event:
    """Something that happens to a line, in seconds of the record."""

    onset_s: float
    duration_s: float

    def __post_init__(self) -> None:
        within("onset_s", self.onset_s, 0, np.inf, " s")
        within("duration_s", self.duration_s, 0, np.inf, " s")


@dataclass(frozen=True)
class Flush(Event):
    """Fast flush: the bag's pressure on the line, let go within `release_s` (the valve is not infinitely fast)."""

    bag_mmhg: float = 300.0
    release_s: float = 0.02

    def __post_init__(self) -> None:
        super().__post_init__()
        within("bag_mmhg", self.bag_mmhg, 0, 500, " mmHg")
        within("release_s", self.release_s, 0, 1, " s")


@dataclass(frozen=True)
class Zeroing(Event):
    """The transducer open to air; half-way the monitor takes what it reads as its zero, if `resets`."""

    resets: bool = True


@dataclass(frozen=True)
class BloodSampling(Event):
    """The stopcock closed to the vessel: the last pressure stands, and creeps by `creep_mmhg_per_s` as the flush drips in."""

    creep_mmhg_per_s: float = 0.0


@dataclass(frozen=True)
class Disconnection(Event):
    """The line open to air at its end: `level_mmhg`, without a pulse."""

    level_mmhg: float = 0.0


@dataclass(frozen=True)
class Clot(Event):
    """A clot, kink or bubble: the column has another natural frequency and damping for a while."""

    natural_frequency_hz: float = 3.0
    damping: float = 1.5

    def __post_init__(self) -> None:
        super().__post_init__()
        within("natural_frequency_hz", self.natural_frequency_hz, 0.2, 200, " Hz")
        within("damping", self.damping, 0.02, 50)


@dataclass(frozen=True)
class HeightStep(Event):
    """The transducer moved to `height_cm` above its level; it takes `duration_s`, and it stays there."""

    height_cm: float = 10.0

    def __post_init__(self) -> None:
        super().__post_init__()
        within("height_cm", self.height_cm, -200, 200, " cm")


@dataclass(frozen=True)
class Movement(Event):
    """The patient moves: the catheter is shaken with a standard deviation of `amplitude_mmhg`, 0.5 to 6 Hz."""

    amplitude_mmhg: float = 8.0

    def __post_init__(self) -> None:
        super().__post_init__()
        within("amplitude_mmhg", self.amplitude_mmhg, 0, 200, " mmHg")


@dataclass(frozen=True)
class Diathermy(Event):
    """Diathermy on the ECG: bursts of `amplitude_mv`; it leaves the pressure alone. See `spoil_ecg`."""

    amplitude_mv: float = 2.0

    def __post_init__(self) -> None:
        super().__post_init__()
        within("amplitude_mv", self.amplitude_mv, 0, 100, " mV")


SPAN_KIND: dict[type[Event], str] = {
    Flush: "flush", Zeroing: "zeroing", BloodSampling: "sampling", Disconnection: "disconnected", Clot: "damped",
    HeightStep: "level_change", Movement: "noise",
}


def spoil_ecg(ecg_mv: NDArray[np.float64], sampling_rate: float, events: Sequence[Event], *, seed: int = 1) -> NDArray[np.float64]:
    """A copy of an ECG with the diathermy among `events`: wide-band bursts at twice the mains frequency on a baseline thrown about.

    Parameters
    ----------
    ecg_mv : float64 array, shape (n,)
        Millivolts.
    sampling_rate : float
        Hz.
    events : sequence of Event
        Others than `Diathermy` leave the ECG alone.
    """
    out = np.array(ecg_mv, dtype=np.float64)
    rng = np.random.default_rng(seed)
    for event in sorted((e for e in events if isinstance(e, Diathermy)), key=lambda e: e.onset_s):
        start, stop = round(event.onset_s * sampling_rate), round((event.onset_s + event.duration_s) * sampling_rate)
        n = min(stop, len(out)) - start
        if n <= 0:
            continue
        time = np.arange(n) / sampling_rate
        burst = 0.6 + 0.4 * np.sin(2 * np.pi * 100.0 * time + rng.uniform(0, 2 * np.pi))
        cutting = np.repeat(rng.uniform(0.4, 1.0, n // max(1, round(0.4 * sampling_rate)) + 1), max(1, round(0.4 * sampling_rate)))[:n]
        thrown = np.exp(-time / 0.8) * rng.choice([-1.0, 1.0]) + np.exp((time - time[-1]) / 0.3) * 0.3
        out[start : start + n] += event.amplitude_mv * (cutting * burst * rng.standard_normal(n) + 0.8 * thrown)
    return out
