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
from caval.model._checks import within
from caval.model.events import SPAN_KIND, BloodSampling, Clot, Diathermy, Disconnection, Event, Flush, HeightStep, Movement, Zeroing
from caval.recording import Calibration

__all__ = ["BLOOD_DENSITY", "MMHG_PER_CM_BLOOD", "Line", "Measured", "measure"]

BLOOD_DENSITY = 1.055
"""g/ml; published values are 1.05 to 1.06."""
MMHG_PER_CM_BLOOD = BLOOD_DENSITY * 0.735559
"""Pressure of a column of 1 cm of blood, 0.776 mmHg."""
_BUTTERWORTH = float(np.sqrt(0.5))


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
    damping: float = 0.40
    delay_s: float = 0.010
    offset_mmhg: float = 0.0
    height_cm: float = 0.0
    lowpass_hz: float | None = 40.0
    noise_mmhg: float = 0.05
    range_mmhg: tuple[float, float] = (-50.0, 300.0)

    def __post_init__(self) -> None:
        within("natural_frequency_hz", self.natural_frequency_hz, 1, 200, " Hz")
        within("damping", self.damping, 0.02, 5)
        within("delay_s", self.delay_s, 0, 1, " s")
        within("offset_mmhg", self.offset_mmhg, -200, 200, " mmHg")
        within("height_cm", self.height_cm, -100, 100, " cm")
        within("noise_mmhg", self.noise_mmhg, 0, 50, " mmHg")
        if self.lowpass_hz is not None:
            within("lowpass_hz", self.lowpass_hz, 1, 1000, " Hz")
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
        rows.append((event.onset_s, event.duration_s + after, SPAN_KIND[type(event)], channel, type(event).__name__))
    return pd.DataFrame(rows, columns=["onset_s", "duration_s", "kind", "channel", "detail"])
