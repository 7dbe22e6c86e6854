"""The measuring line: what a fluid-filled catheter, a transducer, a monitor and a recorder make of a pressure.

::

    vessel ── height of the transducer ── stopcocks and flush ── fluid column ── offset ── delay ── monitor low-pass ── noise
                                                                  (f_n, ζ)                                              │
    stored integers ◀── calibration ◀── recorder rate ◀── monitor's range ◀─────────────────────────────────────────────┘

The fluid column is a mass on a spring: ``p'' + 2ζω p' + ω² p = ω² u``. It is solved exactly for an input that runs straight between
samples (matrix exponential, first-order hold), so its own frequency and damping do not depend on the sampling rate. The monitor's low-pass
is a Butterworth filter of second order, which is the same equation with ζ = 1/√2. A flush is not drawn: the bag's pressure takes the place
of the vessel's at the column, and the ring is what the column does when it is let go.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from caval.errors import InputError
from caval.recording import Calibration

__all__ = [
    "BLOOD_DENSITY", "BloodSampling", "Clot", "Diathermy", "Disconnection", "Event", "Flush", "HeightStep", "Line", "MMHG_PER_CM_BLOOD",
    "Measured", "Movement", "Ring", "Zeroing", "fast_flush", "find_ring", "measure", "ring_response", "spoil_ecg",
]

BLOOD_DENSITY = 1.055
"""g/ml; published values are 1.05 to 1.06."""
MMHG_PER_CM_BLOOD = BLOOD_DENSITY * 0.735559
"""Pressure of a column of 1 cm of blood, 0.776 mmHg."""
_BUTTERWORTH = float(np.sqrt(0.5))


# ---------------------------------------------------------------------------------------------------------------- the line


@dataclass(frozen=True)
class Line:
    """A measuring line.

    Attributes
    ----------
    natural_frequency_hz, damping : float
        Of the fluid column and transducer: f_n (1 to 200 Hz) and ζ (0.02 to 5).
    delay_s : float
        Pure delay of the line and monitor, 0 to 1 s, on top of the delay that the column and the low-pass bring.
    offset_mmhg : float
        What the transducer reads at zero pressure.
    height_cm : float
        How far the transducer stands above the level it is meant to stand at; it then reads low.
    lowpass_hz : float or None
        The monitor's low-pass.
    noise_mmhg : float
        Standard deviation of white noise on each recorded sample.
    range_mmhg : (float, float)
        What the monitor can show; beyond it the trace is cut.
    """

    natural_frequency_hz: float = 14.0
    damping: float = 0.25
    delay_s: float = 0.010
    offset_mmhg: float = 0.0
    height_cm: float = 0.0
    lowpass_hz: float | None = 40.0
    noise_mmhg: float = 0.05
    range_mmhg: tuple[float, float] = (-50.0, 300.0)

    def __post_init__(self) -> None:
        _within("natural_frequency_hz", self.natural_frequency_hz, 1, 200, " Hz")
        _within("damping", self.damping, 0.02, 5)
        _within("delay_s", self.delay_s, 0, 1, " s")
        _within("offset_mmhg", self.offset_mmhg, -200, 200, " mmHg")
        _within("height_cm", self.height_cm, -100, 100, " cm")
        _within("noise_mmhg", self.noise_mmhg, 0, 50, " mmHg")
        if self.lowpass_hz is not None:
            _within("lowpass_hz", self.lowpass_hz, 1, 1000, " Hz")
        if not self.range_mmhg[0] < self.range_mmhg[1]:
            raise InputError(f"range_mmhg = {self.range_mmhg!r}: the first must be below the second")

    @property
    def low_frequency_delay_s(self) -> float:
        """Delay of slow waves in seconds: ``delay_s`` and 2ζ/ω_n of the column and of the low-pass."""
        column = 2 * self.damping / (2 * np.pi * self.natural_frequency_hz)
        filtered = 0.0 if self.lowpass_hz is None else 2 * _BUTTERWORTH / (2 * np.pi * self.lowpass_hz)
        return self.delay_s + column + filtered

    def gain(self, frequency_hz: ArrayLike) -> NDArray[np.float64]:
        """Amplitude ratio of the fluid column, without the monitor, at frequencies in Hz."""
        ratio = np.asarray(frequency_hz, dtype=np.float64) / self.natural_frequency_hz
        return 1.0 / np.hypot(1 - ratio**2, 2 * self.damping * ratio)

    @property
    def height_mmhg(self) -> float:
        """What the height of the transducer adds to the reading; below zero when it stands too high."""
        return -self.height_cm * MMHG_PER_CM_BLOOD


# ---------------------------------------------------------------------------------------------------------------- events


@dataclass(frozen=True)
class Event:
    """Something that happens to a line, in seconds of the record."""

    onset_s: float
    duration_s: float

    def __post_init__(self) -> None:
        _within("onset_s", self.onset_s, 0, np.inf, " s")
        _within("duration_s", self.duration_s, 0, np.inf, " s")


@dataclass(frozen=True)
class Flush(Event):
    """Fast flush: the bag's pressure on the line, let go within `release_s` (the valve is not infinitely fast)."""

    bag_mmhg: float = 300.0
    release_s: float = 0.02

    def __post_init__(self) -> None:
        super().__post_init__()
        _within("bag_mmhg", self.bag_mmhg, 0, 500, " mmHg")
        _within("release_s", self.release_s, 0, 1, " s")


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
        _within("natural_frequency_hz", self.natural_frequency_hz, 0.2, 200, " Hz")
        _within("damping", self.damping, 0.02, 50)


@dataclass(frozen=True)
class HeightStep(Event):
    """The transducer moved to `height_cm` above its level; it takes `duration_s`, and it stays there."""

    height_cm: float = 10.0

    def __post_init__(self) -> None:
        super().__post_init__()
        _within("height_cm", self.height_cm, -200, 200, " cm")


@dataclass(frozen=True)
class Movement(Event):
    """The patient moves: the catheter is shaken with a standard deviation of `amplitude_mmhg`, 0.5 to 6 Hz."""

    amplitude_mmhg: float = 8.0

    def __post_init__(self) -> None:
        super().__post_init__()
        _within("amplitude_mmhg", self.amplitude_mmhg, 0, 200, " mmHg")


@dataclass(frozen=True)
class Diathermy(Event):
    """Diathermy on the ECG: bursts of `amplitude_mv`; it leaves the pressure alone. See `spoil_ecg`."""

    amplitude_mv: float = 2.0

    def __post_init__(self) -> None:
        super().__post_init__()
        _within("amplitude_mv", self.amplitude_mv, 0, 100, " mV")


_SPAN_KIND: dict[type[Event], str] = {
    Flush: "flush", Zeroing: "zeroing", BloodSampling: "sampling", Disconnection: "disconnected", Clot: "damped",
    HeightStep: "level_change", Movement: "noise",
}


# ---------------------------------------------------------------------------------------------------------------- measuring


@dataclass(frozen=True, eq=False)
class Measured:
    """What the recorder stored, and the truth about it.

    Attributes
    ----------
    digital : int64 array, shape (n,)
        Stored integers; ``calibration.to_physical(digital)`` is the recorded trace.
    clean_mmhg : float64 array, shape (n,)
        The same samples without noise, movement, cut and quantisation: the noise-free pressure after the line on the recorded clock, events
        included.
    sampling_rate : float
        Hz of the recorder; sample i stands at ``i / sampling_rate`` seconds.
    calibration : Calibration
    delay_s : float
        Delay of slow waves against the vessel, seconds (`Line.low_frequency_delay_s`).
    spans : DataFrame
        Columns ``onset_s, duration_s, kind, channel, detail``: the events as the trace shows them, delay and settling included.
    """

    digital: NDArray[np.int64]
    clean_mmhg: NDArray[np.float64]
    sampling_rate: float
    calibration: Calibration
    delay_s: float
    spans: pd.DataFrame = field(repr=False)

    @property
    def mmhg(self) -> NDArray[np.float64]:
        """The recorded trace, mmHg, shape (n,)."""
        return self.calibration.to_physical(self.digital)


def measure(
    pressure_mmhg: NDArray[np.float64],
    rate_in: float,
    line: Line | None = None,
    events: Sequence[Event] = (),
    *,
    sampling_rate: float = 125.0,
    calibration: Calibration | None = None,
    channel: str = "CVP",
    seed: int = 1,
) -> Measured:
    """Measure a pressure through a line.

    Parameters
    ----------
    pressure_mmhg : float64 array, shape (n,)
        Pressure in the vessel; straight lines between samples are what the column is solved for.
    rate_in : float
        Its rate in Hz: at least the recorder's, and at least four times the natural frequency of the line.
    line : Line, optional
    events : sequence of Event
        In any order. Where two that act on the source overlap (flush, zeroing, sampling, disconnection), the later one counts.
        `Diathermy` leaves the pressure alone.
    sampling_rate : float
        Hz of the recorder.
    calibration : Calibration, optional
        Stored integers; 16 bits of 0.01 mmHg by default.
    channel : str
        Label for the spans.
    seed : int
        Of noise and movement.

    Raises
    ------
    InputError
        A rate that does not fit, an event that begins after the end, a pressure that is not finite.

    Examples
    --------
    >>> import numpy as np
    >>> still = measure(np.full(1000, 8.0), 250, Line(noise_mmhg=0, height_cm=10), sampling_rate=125)
    >>> round(float(still.mmhg[0]), 2)
    0.24
    """
    line = Line() if line is None else line
    pressure = np.asarray(pressure_mmhg, dtype=np.float64)
    _check_input(pressure, rate_in, sampling_rate, line, events)
    ordered = sorted((e for e in events if not isinstance(e, Diathermy)), key=lambda e: e.onset_s)
    noise_rng, movement_rng = np.random.default_rng(seed).spawn(2)
    time = np.arange(len(pressure)) / rate_in

    source = _source(pressure, time, line, ordered)
    column = _through_column(source, rate_in, line, ordered) + _offset(time, line, ordered)
    shaking = _movement(time, rate_in, ordered, movement_rng)
    if shaking is not None:
        shaking = _second_order(shaking, 1 / rate_in, line.natural_frequency_hz, line.damping)[0]
    n = int((len(pressure) - 1) / rate_in * sampling_rate + 1e-9) + 1
    at = np.arange(n) / sampling_rate - line.delay_s
    clean = _recorded(column, at, rate_in, line)
    spoiled = clean if shaking is None else clean + _recorded(shaking, at, rate_in, line)
    if line.noise_mmhg:
        spoiled = spoiled + line.noise_mmhg * noise_rng.standard_normal(n)
    used = Calibration(-32767, 32767, -327.67, 327.67) if calibration is None else calibration
    digital = used.to_digital(np.clip(spoiled, *line.range_mmhg))
    return Measured(digital, clean, float(sampling_rate), used, line.low_frequency_delay_s, _spans(ordered, line, channel))


def _check_input(pressure: NDArray, rate_in: float, sampling_rate: float, line: Line, events: Sequence[Event]) -> None:
    if pressure.ndim != 1 or len(pressure) < 2 or not np.isfinite(pressure).all():
        raise InputError(f"pressure_mmhg of shape {pressure.shape}: one dimension, two samples or more, all finite, are needed")
    if not 0 < sampling_rate <= rate_in:
        raise InputError(f"sampling_rate = {sampling_rate!r} Hz: it must be above 0 and not above rate_in, {rate_in!r} Hz")
    least = 4 * max([line.natural_frequency_hz, *(e.natural_frequency_hz for e in events if isinstance(e, Clot))])
    if rate_in < least:
        raise InputError(f"rate_in = {rate_in!r} Hz: this line needs at least {least:g} Hz (four times its natural frequency)")
    end = len(pressure) / rate_in
    for event in events:
        if event.onset_s >= end:
            raise InputError(f"{type(event).__name__} at {event.onset_s:g} s: the record ends at {end:g} s")


def _source(pressure: NDArray, time: NDArray, line: Line, events: Sequence[Event]) -> NDArray[np.float64]:
    """What stands at the column: the vessel's pressure with the height of the transducer, or what a stopcock puts in its place."""
    height = np.full(len(time), line.height_cm)
    for event in events:
        if isinstance(event, HeightStep):
            share = np.clip((time - event.onset_s) / max(event.duration_s, 1e-9), 0, 1)
            height += (event.height_cm - height) * share
    source = pressure - MMHG_PER_CM_BLOOD * height
    vessel = source.copy()
    for event in events:
        start, stop = np.searchsorted(time, [event.onset_s, event.onset_s + event.duration_s])
        part = slice(int(start), int(stop))
        if isinstance(event, Zeroing):
            source[part] = 0.0
        elif isinstance(event, Disconnection):
            source[part] = event.level_mmhg
        elif isinstance(event, BloodSampling):
            source[part] = vessel[max(start - 1, 0)] + event.creep_mmhg_per_s * (time[part] - event.onset_s)
        elif isinstance(event, Flush):
            source[part] = event.bag_mmhg
            end = event.onset_s + event.duration_s
            closing = slice(int(stop), int(np.searchsorted(time, end + event.release_s)))
            share = (time[closing] - end) / max(event.release_s, 1e-9)
            source[closing] = event.bag_mmhg * (1 - share) + source[closing] * share
    return source


def _through_column(source: NDArray, rate: float, line: Line, events: Sequence[Event]) -> NDArray[np.float64]:
    """The source through the fluid column, piece by piece where a clot changes it; pressure and its slope go on across the border."""
    n = len(source)
    kind = np.full(n, -1)
    clots = [e for e in events if isinstance(e, Clot)]
    for number, clot in enumerate(clots):
        kind[round(clot.onset_s * rate) : round((clot.onset_s + clot.duration_s) * rate)] = number
    borders = [0, *(np.flatnonzero(np.diff(kind)) + 1), n]
    out = np.empty(n)
    state: tuple[float, float] | None = None
    for start, stop in pairwise(borders):
        low = max(start - 1, 0)  # the sample the pieces share, whose state is known
        column: Line | Clot = line if kind[start] < 0 else clots[kind[start]]
        piece, state = _second_order(source[low:stop], 1 / rate, column.natural_frequency_hz, column.damping, state)
        out[start:stop] = piece[start - low :]
    return out


def _second_order(
    u: NDArray, step_s: float, f_n: float, zeta: float, state: tuple[float, float] | None = None
) -> tuple[NDArray[np.float64], tuple[float, float]]:
    """Exact response of ``p'' + 2ζω p' + ω² p = ω² u`` to an input straight between samples.

    `state` is (p, p') at the first sample; in balance by default. Returns p at every sample and the state at the last.

    With x = (p, p'), x₊ = Φx + Γ₁u + Γ₂u₊; the same as a recursion of second order on p, and one on p', which is fast.
    """
    from scipy.linalg import expm
    from scipy.signal import lfilter

    omega = 2 * np.pi * f_n
    a_dt = np.array([[0.0, 1.0], [-(omega**2), -2 * zeta * omega]]) * step_s
    held = np.zeros((4, 4))  # exponential of the system with its input and the input's slope as further states
    held[:2, :2], held[:2, 2], held[2, 3] = a_dt, [0.0, omega**2 * step_s], 1.0
    full = expm(held)
    phi, gamma_2 = full[:2, :2], full[:2, 3]
    gamma_1 = full[:2, 2] - gamma_2
    start = np.array([u[0], 0.0] if state is None else state)
    trace_ = float(np.trace(phi))
    recursion = np.array([1.0, -trace_, float(np.linalg.det(phi))])
    adjugate = phi - trace_ * np.eye(2)
    taps = np.stack([gamma_2, gamma_1 + adjugate @ gamma_2, adjugate @ gamma_1])
    following = phi @ start + gamma_1 * u[0]
    rows = []
    for i in (0, 1):  # p, then p'
        b = taps[:, i]
        before = [start[i] - b[0] * u[0], following[i] - b[1] * u[0] + recursion[1] * start[i]]
        rows.append(lfilter(b, recursion, u, zi=before)[0])
    return rows[0], (float(rows[0][-1]), float(rows[1][-1]))


def _recorded(column: NDArray, at_s: NDArray, rate: float, line: Line) -> NDArray[np.float64]:
    """After the monitor's low-pass, at the recorder's times."""
    if line.lowpass_hz is not None:
        column = _second_order(column, 1 / rate, line.lowpass_hz, _BUTTERWORTH)[0]
    return _between(column, at_s * rate)


def _between(values: NDArray, place: NDArray) -> NDArray[np.float64]:
    """Values at fractional sample positions by cubic convolution (Keys 1981); the first and last stand beyond the ends."""
    place = np.clip(place, 0, len(values) - 1)
    low = np.minimum(place.astype(np.int64), max(len(values) - 2, 0))
    t = place - low
    if not t.any():
        return values[low]
    before, here, after, beyond = (values[np.clip(low + k, 0, len(values) - 1)] for k in (-1, 0, 1, 2))
    return here + 0.5 * t * (
        after - before + t * (2 * before - 5 * here + 4 * after - beyond + t * (3 * (here - after) + beyond - before))
    )


def _offset(time: NDArray, line: Line, events: Sequence[Event]) -> NDArray[np.float64]:
    """The transducer's offset, until the monitor is zeroed."""
    offset = np.full(len(time), line.offset_mmhg)
    for event in events:
        if isinstance(event, Zeroing) and event.resets:
            offset[time >= event.onset_s + 0.5 * event.duration_s] = 0.0
    return offset


def _movement(time: NDArray, rate: float, events: Sequence[Event], rng: np.random.Generator) -> NDArray[np.float64] | None:
    """Shaking of the catheter over the whole record, None when nobody moves."""
    from scipy.signal import butter, sosfilt

    moves = [e for e in events if isinstance(e, Movement)]
    if not moves:
        return None
    shaking = np.zeros(len(time))
    band = butter(2, [0.5, min(6.0, 0.45 * rate)], btype="bandpass", fs=rate, output="sos")
    for event in moves:
        start, stop = np.searchsorted(time, [event.onset_s, event.onset_s + event.duration_s])
        if stop - start < 3:
            continue
        drawn = sosfilt(band, rng.standard_normal(stop - start + round(4 * rate)))[round(4 * rate) :]
        shaking[start:stop] += event.amplitude_mmhg * drawn / drawn.std() * np.sin(np.linspace(0, np.pi, stop - start)) ** 0.5
    return shaking


def _spans(events: Sequence[Event], line: Line, channel: str) -> pd.DataFrame:
    zeta = line.damping
    slowest = zeta if zeta < 1 else zeta - np.sqrt(zeta**2 - 1)  # of the poles, in units of ω
    settling = np.log(300 / 0.5) / (2 * np.pi * line.natural_frequency_hz * slowest)  # 300 mmHg down to 0.5
    rows = []
    for event in events:
        after = line.low_frequency_delay_s
        if isinstance(event, (Flush, Zeroing, Disconnection, BloodSampling)):
            after += settling if isinstance(event, Flush) else settling / 2
        after += event.release_s if isinstance(event, Flush) else 0.0
        rows.append((event.onset_s, event.duration_s + after, _SPAN_KIND[type(event)], channel, type(event).__name__))
    return pd.DataFrame(rows, columns=["onset_s", "duration_s", "kind", "channel", "detail"])


# ---------------------------------------------------------------------------------------------------------------- the ring


@dataclass(frozen=True)
class Ring:
    """The ring after a flush: its frequency (Hz), the ratio of successive half-cycle swings, how many swings stood out of the pulse, and
    the natural frequency (Hz) and damping they stand for."""

    ring_hz: float
    ratio: float
    swings: int
    natural_frequency_hz: float
    damping: float


def ring_response(f_n: float, zeta: float, time_s: ArrayLike) -> NDArray[np.float64]:
    """What a column held at 1 does when it is let go to 0 at time 0: 1 before, then the ring (below ζ = 1) or the creep.

    Parameters
    ----------
    f_n, zeta : float
        Natural frequency, Hz, and damping.
    time_s : array
        Seconds since it was let go.
    """
    _within("f_n", f_n, 1e-3, 1e4, " Hz")
    _within("zeta", zeta, 0.0, 50)
    omega = 2 * np.pi * f_n
    t = np.maximum(np.asarray(time_s, dtype=np.float64), 0.0)
    if abs(zeta - 1) < 1e-9:
        return (1 + omega * t) * np.exp(-omega * t)
    if zeta < 1:
        root = np.sqrt(1 - zeta**2)
        return np.exp(-zeta * omega * t) * (np.cos(root * omega * t) + zeta / root * np.sin(root * omega * t))
    root = np.sqrt(zeta**2 - 1)
    slow, fast = omega * (zeta - root), omega * (zeta + root)
    return (fast * np.exp(-slow * t) - slow * np.exp(-fast * t)) / (fast - slow)


def fast_flush(ring_hz: float, ratio: float) -> tuple[float, float]:
    """Natural frequency (Hz) and damping from the ring of a fast flush.

    Parameters
    ----------
    ring_hz : float
        One over the period of the ring.
    ratio : float
        Of successive half-cycle swings, between 0 and 1: each swing from a peak to the next trough, over the one before.

    Notes
    -----
    ``ζ = -ln r / √(π² + ln² r)``, ``f_n = f_d / √(1 - ζ²)``: the free ring of a system of second order.

    Examples
    --------
    >>> f_n, zeta = fast_flush(25 / 1.7, 17 / 24)
    >>> round(f_n, 1), round(zeta, 2)
    (14.8, 0.11)
    """
    _within("ring_hz", ring_hz, 1e-3, 1e4, " Hz")
    if not 0 < ratio < 1:
        raise InputError(f"ratio = {ratio!r}: it must be above 0 and below 1; each swing of a ring is smaller than the one before")
    log = np.log(ratio)
    zeta = float(-log / np.hypot(np.pi, log))
    return float(ring_hz / np.sqrt(1 - zeta**2)), zeta


def find_ring(
    values: NDArray[np.float64], sampling_rate: float, released_s: float, *, longest_s: float = 1.5, smallest_mmhg: float = 4.0
) -> Ring | None:
    """The ring after the release of a fast flush, read off a trace.

    Parameters
    ----------
    values : float64 array, shape (n,)
        Pressure, mmHg.
    sampling_rate : float
        Hz; above twice the ring's frequency.
    released_s : float
        When the flush had been let go, seconds from ``values[0]``, line and monitor delay included.
    longest_s : float
        How long the ring is looked for.
    smallest_mmhg : float
        Swings below it are lost in the pulse, which goes on underneath; the ring is read until a quarter of it is left.

    Returns
    -------
    Ring or None
        None where there is nothing to read: fewer than eight samples not cut, no swing above 2.5 times `smallest_mmhg`, or a line so damped
        (ζ above 0.8) that it does not ring.

    Notes
    -----
    A free ring ``e^(-ζωt)(A cos ω_d t + B sin ω_d t)`` on a curved level is fitted by least squares: A, B and the level by linear algebra
    for every (f_n, ζ) of a coarse grid, then the best (f_n, ζ) refined. This is what is read by hand from two swings (`fast_flush`), but
    from every sample that is not cut, so that a pulse underneath or few samples a period matter less. A linear monitor filter changes the
    height of a free ring and neither its frequency nor its decay.
    """
    values = np.asarray(values, dtype=np.float64)
    start, stop = max(round(released_s * sampling_rate), 0), round((released_s + longest_s) * sampling_rate)
    part = values[start:stop]
    if len(part) < 8:
        return None
    level = float(np.median(part[len(part) // 2 :]))
    whole = (part > values.min()) & (part < values.max())  # the monitor may have cut what stands at the limits of the trace
    away = np.abs(part - level)
    height = float(away[whole].max(initial=0.0))
    if height < 2.5 * smallest_mmhg:
        return None
    still = int(np.flatnonzero(away > max(0.03 * height, smallest_mmhg))[-1]) + 1
    at: NDArray[np.float64] | None = None
    for _ in range(3):  # the end of the ring by eye, then by its own decay
        time = np.flatnonzero(whole[:still]) / sampling_rate
        if len(time) < 8:
            return None
        at = _fit_ring(time, part[:still][whole[:still]], 0.5 * sampling_rate, at)
        omega, zeta = 2 * np.pi * np.exp(at[0]), at[1]
        lasts_s = max(np.log(4 * height / smallest_mmhg) / (zeta * omega), 2 * np.pi * 1.25 / omega)
        still = min(len(part), round(lasts_s * sampling_rate))
    if at is None or at[1] > 0.8:
        return None
    f_n, zeta = float(np.exp(at[0])), float(at[1])
    ring_hz = f_n * float(np.sqrt(1 - zeta**2))
    ratio = float(np.exp(-np.pi * zeta / np.sqrt(1 - zeta**2)))
    swings = int(np.log(height / smallest_mmhg) / (zeta * 2 * np.pi * f_n) * 2 * ring_hz)
    return Ring(ring_hz, ratio, swings, f_n, zeta)


def _fit_ring(time: NDArray, heard: NDArray, highest_hz: float, start: NDArray | None) -> NDArray[np.float64]:
    """``(log f_n, ζ)`` of the free ring, on a curved level, that is nearest to what was heard."""
    from scipy.optimize import least_squares

    centred = time - time.mean()

    def left_over(at: NDArray) -> NDArray[np.float64]:
        omega, zeta = 2 * np.pi * np.exp(at[0]), at[1]
        turn, fade = omega * np.sqrt(max(1 - zeta**2, 1e-6)) * time, np.exp(-zeta * omega * time)
        basis = np.stack([fade * np.cos(turn), fade * np.sin(turn), np.ones_like(time), centred, centred**2], axis=1)
        rest: NDArray[np.float64] = heard - basis @ np.linalg.lstsq(basis, heard, rcond=None)[0]
        return rest

    if start is None:
        frequencies = np.log(np.geomspace(2.0, min(60.0, 0.9 * highest_hz), 28))
        tried = [np.array([f, z]) for f in frequencies for z in (0.06, 0.12, 0.22, 0.35, 0.55)]
        start = min(tried, key=lambda at: float(np.sum(left_over(at) ** 2)))
    bounds = ([np.log(0.5), 0.005], [np.log(highest_hz), 0.95])
    found: NDArray[np.float64] = least_squares(left_over, start, bounds=bounds, x_scale=[0.05, 0.02]).x
    return np.clip(found, [np.log(0.51), 0.006], [np.log(0.99 * highest_hz), 0.94])


# ---------------------------------------------------------------------------------------------------------------- on the ECG


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


def _within(name: str, value: float, low: float, high: float, unit: str = "") -> None:
    if not low <= value <= high or (np.isinf(high) and not np.isfinite(value)):
        allowed = f"{low:g} or more" if np.isinf(high) else f"between {low:g} and {high:g}"
        raise InputError(f"{name} = {value!r}: it must be {allowed}{unit}")
