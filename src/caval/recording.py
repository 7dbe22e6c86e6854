"""Recording and Channel: one multichannel structure for every format, lazy, multi-rate, with gaps and calibration.

Time is seconds from the start of the record; samples count from 0 in each channel; sample ``i`` of a channel stands at
``start_s + i / sampling_rate``::

    record   0 s ─────────────────────────────────── duration_s
    ECG      |0|1|2|3|4|5|6|7|8|…                    500 Hz
    CVP      |0      |1      |2 ░░gap░░|5      |…    125 Hz, samples 3 and 4 were not recorded: NaN in what `read` returns
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field, replace
from datetime import datetime
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from caval.errors import InputError
from caval.track import Track
from caval.units import is_pressure_unit

__all__ = ["Calibration", "Channel", "Recording", "Signal"]

_NO_GAPS = np.empty((0, 2), dtype=np.int64)


@dataclass(frozen=True)
class Calibration:
    """The straight line from stored integers to physical values, given by two points of it (the EDF way).

    `missing` is the stored code that means "no value", None when every code is a value.
    """

    digital_min: int
    digital_max: int
    physical_min: float
    physical_max: float
    missing: int | None = None

    @property
    def scale(self) -> float:
        """Physical units a stored step."""
        return (self.physical_max - self.physical_min) / (self.digital_max - self.digital_min)

    def to_physical(self, digital: NDArray) -> NDArray[np.float64]:
        """Physical values, float64, of integers; NaN for the missing code."""
        values = (digital.astype(np.float64) - self.digital_min) * self.scale + self.physical_min
        if self.missing is not None:
            values[digital == self.missing] = np.nan
        return values

    def to_digital(self, physical: NDArray) -> NDArray[np.int64]:
        """Nearest integers of physical values, clipped to the digital range; NaN becomes the missing code, else the minimum."""
        steps = np.rint((np.asarray(physical, float) - self.physical_min) / self.scale) + self.digital_min
        blank = self.digital_min if self.missing is None else self.missing
        return np.where(np.isnan(steps), blank, np.clip(steps, self.digital_min, self.digital_max)).astype(np.int64)


@dataclass(frozen=True, eq=False)
class Signal:
    """A stretch of a channel in memory, as stages take it.

    Attributes
    ----------
    values : float64 array, shape (n,)
        Physical values in `unit`; NaN where nothing was recorded.
    sampling_rate : float
        Hz.
    start_s : float
        Time of ``values[0]`` in seconds of the record.
    label, unit : str
        `unit` is ``mmHg`` for every pressure.
    """

    values: NDArray[np.float64]
    sampling_rate: float
    start_s: float = 0.0
    label: str = ""
    unit: str = ""

    def __len__(self) -> int:
        return len(self.values)

    @property
    def stop_s(self) -> float:
        return self.start_s + len(self.values) / self.sampling_rate

    @property
    def time_s(self) -> NDArray[np.float64]:
        """Time of every sample, seconds, shape (n,)."""
        return self.start_s + np.arange(len(self.values)) / self.sampling_rate

    def position(self, time_s: ArrayLike) -> NDArray[np.float64]:
        """Fractional sample positions (0-based) of times in seconds."""
        return (np.asarray(time_s, dtype=np.float64) - self.start_s) * self.sampling_rate

    def at(self, time_s: ArrayLike) -> NDArray[np.float64]:
        """Values at times in seconds, by straight lines between samples; NaN for NaN, outside the stretch, and beside a missing sample."""
        place = np.nan_to_num(self.position(time_s), nan=-1.0)
        if not len(self.values):
            return np.full(np.shape(place), np.nan)
        inside = (place >= -1e-6) & (place <= len(self.values) - 1 + 1e-6)
        low = np.clip(np.floor(place), 0, max(0, len(self.values) - 2)).astype(np.int64)
        high = np.minimum(low + 1, len(self.values) - 1)
        share = np.clip(place - low, 0.0, 1.0)
        mixed = np.where(share == 0, self.values[low], self.values[low] * (1 - share) + self.values[high] * share)
        return np.where(inside, mixed, np.nan)


@dataclass(frozen=True, eq=False)
class Channel:
    """One signal of a recording, at its own rate.

    Attributes
    ----------
    label, unit : str
        As the file has them; `unit` may be empty.
    sampling_rate : float
        Hz.
    n_samples : int
        Samples on the record's clock, gaps included.
    source : callable
        ``source(start, stop)`` gives the stored samples of ``[start, stop)``: integers when there is a `calibration`, else
        physical values as floats. What it gives inside a gap is of no meaning.
    calibration : Calibration or None
    start_s : float
        Time of sample 0 (a WFDB skew; else 0).
    gaps : int64 array, shape (k, 2)
        Sample ranges ``[start, stop)`` in which nothing was recorded, sorted, apart.
    transducer, prefilter : str
    header : mapping of str to str
        Header text of the source format, kept so that nothing is lost on the way back (``edf.physical_min``: ``-32.77``).
    """

    label: str
    unit: str
    sampling_rate: float
    n_samples: int
    source: Callable[[int, int], NDArray]
    calibration: Calibration | None = None
    start_s: float = 0.0
    gaps: NDArray[np.int64] = field(default_factory=lambda: _NO_GAPS)
    transducer: str = ""
    prefilter: str = ""
    header: Mapping[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        if not (math.isfinite(self.sampling_rate) and self.sampling_rate > 0):
            raise InputError(f"channel {self.label!r}: sampling rate {self.sampling_rate!r} Hz; it must be above 0")
        if self.n_samples < 0:
            raise InputError(f"channel {self.label!r}: {self.n_samples} samples; the number cannot be negative")

    @property
    def duration_s(self) -> float:
        return self.n_samples / self.sampling_rate

    def span(self, start_s: float = 0.0, stop_s: float | None = None) -> tuple[int, int]:
        """Sample range ``[start, stop)`` whose times lie in ``[start_s, stop_s)``, kept inside the channel."""
        bounds = []
        for time in (start_s, self.start_s + self.duration_s if stop_s is None else stop_s):
            place = (time - self.start_s) * self.sampling_rate
            bounds.append(min(max(math.ceil(place - 1e-6), 0), self.n_samples))
        return bounds[0], max(bounds)

    def digital(self, start: int = 0, stop: int | None = None) -> NDArray:
        """Stored samples of ``[start, stop)``; integers, or floats for a channel without calibration."""
        stop = self.n_samples if stop is None else stop
        if not 0 <= start <= stop <= self.n_samples:
            raise InputError(f"channel {self.label!r}: samples {start} to {stop} asked of {self.n_samples}")
        return self.source(start, stop)

    def physical(self, start: int = 0, stop: int | None = None) -> NDArray[np.float64]:
        """Physical values of samples ``[start, stop)``, float64, in `unit`; NaN in gaps and for the missing code."""
        stop = self.n_samples if stop is None else stop
        stored = self.digital(start, stop)
        values = stored.astype(np.float64) if self.calibration is None else self.calibration.to_physical(stored)
        for gap_start, gap_stop in self.gaps:
            if gap_stop > start and gap_start < stop:
                values[max(gap_start - start, 0) : gap_stop - start] = np.nan
        return values

    def blocks(self, length: int = 1 << 20) -> Iterator[tuple[int, NDArray]]:
        """Stored samples piece by piece, each with the number of its first sample."""
        for start in range(0, self.n_samples, length):
            yield start, self.digital(start, min(start + length, self.n_samples))

    def holes(self) -> NDArray[np.int64]:
        """Sample ranges ``[start, stop)`` without a value: gaps, missing codes and NaN; shape (k, 2), sorted."""
        found = [self.gaps]
        for start, stored in self.blocks():
            if self.calibration is None:
                mask = ~np.isfinite(stored)
            elif self.calibration.missing is not None:
                mask = stored == self.calibration.missing
            else:
                continue
            edges = np.flatnonzero(np.diff(np.concatenate([[False], mask, [False]]).astype(np.int8)))
            found.append(edges.reshape(-1, 2).astype(np.int64) + start)
        ranges = np.concatenate(found)
        return ranges[np.argsort(ranges[:, 0], kind="stable")]

    def integer_calibration(self, low: int, high: int) -> Calibration:
        """The channel's own calibration or, for a channel of floats, a fixed one: steps of 0.01 in a pressure unit, of 0.001 in any other,
        ten times wider as often as the largest value needs."""
        if self.calibration is not None:
            return self.calibration
        largest = 0.0
        for _, values in self.blocks():
            finite = values[np.isfinite(values)]
            largest = max(largest, float(np.abs(finite).max(initial=0.0)))
        step = 0.01 if is_pressure_unit(self.unit) else 0.001
        while largest > step * high:
            step *= 10.0
        return Calibration(low, high, low * step, high * step)

    def signal(self, start_s: float = 0.0, stop_s: float | None = None) -> Signal:
        """The stretch ``[start_s, stop_s)`` in memory."""
        start, stop = self.span(start_s, stop_s)
        return Signal(self.physical(start, stop), self.sampling_rate, self.start_s + start / self.sampling_rate, self.label, self.unit)


@dataclass(frozen=True, eq=False)
class Recording:
    """Channels and annotation tracks over one clock.

    Attributes
    ----------
    name : str
        The record's name, without folder or ending.
    channels : tuple of Channel
    start_time : datetime or None
        Wall-clock time of 0 s, with microseconds, no zone.
    tracks : mapping of str to Track
        Annotations by where they stand: ``annotations`` for EDF+, the file ending for WFDB (``atr``, ``qrs``).
    header : mapping of str to str
        Record-level header text of the source format.
    format, path
        Name of the format it was read with and the file, None for a recording made in memory.
    notes : tuple of str
        What the reader had to assume or mend, one line each.
    files : tuple of Path
        Every file that holds its header or samples.
    """

    name: str
    channels: tuple[Channel, ...]
    start_time: datetime | None = None
    tracks: Mapping[str, Track] = field(default_factory=dict)
    header: Mapping[str, str] = field(default_factory=dict)
    format: str = ""
    path: Path | None = None
    notes: tuple[str, ...] = ()
    files: tuple[Path, ...] = ()

    @property
    def labels(self) -> tuple[str, ...]:
        return tuple(c.label for c in self.channels)

    @property
    def duration_s(self) -> float:
        """Seconds from 0 to the end of the longest channel."""
        return max((c.start_s + c.duration_s for c in self.channels), default=0.0)

    @property
    def annotations(self) -> Track:
        """All tracks in one."""
        joined = Track.empty()
        for track in self.tracks.values():
            joined = joined.join(track)
        return joined

    def index(self, channel: str | int) -> int:
        """Position of a channel given by label (exact, else without regard to case) or position.

        Raises
        ------
        InputError
            No such channel; the message lists those there are.
        """
        if isinstance(channel, int):
            if 0 <= channel < len(self.channels):
                return channel
        else:
            for match in (lambda a: a == channel, lambda a: a.strip().lower() == channel.strip().lower()):
                found = [i for i, label in enumerate(self.labels) if match(label)]
                if found:
                    return found[0]
        raise InputError(f"no channel {channel!r} in {self.name!r}; there are: {', '.join(self.labels) or 'none'}")

    def channel(self, channel: str | int) -> Channel:
        """The channel of that label or position."""
        return self.channels[self.index(channel)]

    def read(self, channel: str | int, start_s: float = 0.0, stop_s: float | None = None) -> NDArray[np.float64]:
        """Physical values of ``[start_s, stop_s)`` in the channel's own unit, float64, shape (n,); NaN where nothing was recorded."""
        return self.channel(channel).signal(start_s, stop_s).values

    def gaps(self) -> pd.DataFrame:
        """The gaps as spans: columns ``onset_s, duration_s, kind, channel, detail``."""
        rows = [
            (c.start_s + start / c.sampling_rate, (stop - start) / c.sampling_rate, "gap", c.label, "not recorded")
            for c in self.channels
            for start, stop in c.gaps
        ]
        return pd.DataFrame(rows, columns=["onset_s", "duration_s", "kind", "channel", "detail"])

    def with_track(self, name: str, track: Track) -> Recording:
        """A copy with `track` under `name`, joined to what stands there."""
        old = self.tracks.get(name, Track.empty())
        return replace(self, tracks={**self.tracks, name: old.join(track)})

    @classmethod
    def from_arrays(
        cls,
        arrays: Mapping[str, tuple[ArrayLike, float, str]],
        *,
        name: str = "recording",
        start_time: datetime | None = None,
        calibrations: Mapping[str, Calibration] | None = None,
    ) -> Recording:
        """A recording from ``{label: (values, sampling rate in Hz, unit)}``.

        Values are physical floats, or stored integers for a label in `calibrations`. Arrays are not copied.
        """
        channels = []
        for label, (values, rate, unit) in arrays.items():
            data = np.asarray(values)
            if data.ndim != 1:
                raise InputError(f"channel {label!r}: values of shape {data.shape}; one dimension is needed")
            calibration = (calibrations or {}).get(label)
            channels.append(Channel(label, unit, float(rate), len(data), _slicer(data), calibration))
        return cls(name, tuple(channels), start_time)


def _slicer(data: NDArray) -> Callable[[int, int], NDArray]:
    return lambda start, stop: data[start:stop]


