"""A Recording into an EDF+ or BDF+ file: integers travel, never floats."""

from __future__ import annotations

import os
from dataclasses import dataclass
from datetime import datetime
from fractions import Fraction
from math import lcm
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from caval.errors import FileError, InputError
from caval.recording import Calibration, Channel, Recording
from caval.track import Track
from caval_edf.header import MONTHS, ascii_field, number_field
from caval_edf.tal import FILL, GAP, encode, hole_text, spread

__all__ = ["write_edf", "write_marked"]

_RECORD_BYTES = 61440
"""A data record should not be longer (EDF, additional specification 1); longer ones are written only when the rates leave no choice."""
_BLOCK_RECORDS = 256
_WIDTHS = (16, 80, 8, 8, 8, 8, 8, 80, 8, 32)
_LONGEST_RECORD_S = 1000


def write_edf(recording: Recording, path: Path) -> tuple[Path, ...]:
    """Write an .edf (16 bit) or .bdf (24 bit) file with all channels at their own rates and all tracks as annotations.

    Stored integers and calibration limits are copied. A channel of floats gets a fixed range for its kind (pressures steps of
    0.01 mmHg, ECG of 1 µV), ten times wider as often as the data need it. Gaps and missing values are noted as
    annotations ``BAD_LABEL/gap``, and the samples that fill the last data record up (the last value, repeated) as ``BAD_LABEL/fill``;
    the reader turns both back.

    Raises
    ------
    InputError
        Labels, units or integers that the format cannot hold, or rates that share no data record.
    FileError
        The file cannot be written.
    """
    path = Path(path)
    sample_bytes = 3 if path.suffix.lower() == ".bdf" else 2
    if not recording.channels:
        raise InputError(f"{recording.name!r} has no channel to write")
    duration = _record_duration(recording)
    plans = [_plan(channel, int(_rate(channel) * duration), sample_bytes) for channel in recording.channels]
    n_records = max(1, *(-(-p.channel.n_samples // p.per_record) for p in plans))
    start = recording.start_time
    fraction_s = start.microsecond / 1e6 if start is not None else 0.0
    track = recording.annotations.join(_gap_track(plans, n_records))
    annotations, width = _annotation_signal(track, n_records, float(duration), fraction_s, sample_bytes)
    try:
        with open(path, "wb") as stream:
            stream.write(_header(recording, plans, n_records, duration, width // sample_bytes, sample_bytes))
            for first in range(0, n_records, _BLOCK_RECORDS):
                last = min(first + _BLOCK_RECORDS, n_records)
                stream.write(_block(plans, annotations[first:last], width, first, last, sample_bytes))
            stream.flush()
            os.fsync(stream.fileno())
    except OSError as error:
        raise FileError(f"cannot write {path}: {error.strerror or error}") from error
    return (path,)


def write_marked(recording: Recording, track: Track, directory: Path, stem: str) -> tuple[Path, ...]:
    """Write STEM_marked.edf (.bdf from a BDF file): the signals, the annotations that were there, and `track`."""
    ending = ".bdf" if recording.format == "edf" and recording.path and recording.path.suffix.lower() == ".bdf" else ".edf"
    return write_edf(recording.with_track("annotations", track), directory / f"{stem}_marked{ending}")


@dataclass(frozen=True, eq=False)
class _Plan:
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
        if len(values) < stop - start:
            last = values[-1] if len(values) else (self.integers(n - 1, n)[0] if n else 0)
            values = np.concatenate([values, np.full(stop - start - len(values), last, dtype=values.dtype)])
        return values


def _rate(channel: Channel) -> Fraction:
    return Fraction(channel.sampling_rate).limit_denominator(10**6)


def _record_duration(recording: Recording) -> Fraction:
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


def _plan(channel: Channel, per_record: int, sample_bytes: int) -> _Plan:
    low, high = (-(2**15), 2**15 - 1) if sample_bytes == 2 else (-(2**23), 2**23 - 1)
    calibration = channel.integer_calibration(low + 1, high)
    if calibration.digital_min < low or calibration.digital_max > high:
        raise InputError(
            f"channel {channel.label!r} stores integers from {calibration.digital_min} to {calibration.digital_max}; "
            f"{'.edf holds 16 bits, write .bdf instead' if sample_bytes == 2 else '.bdf holds 24 bits'}"
        )
    return _Plan(channel, per_record, calibration, channel.holes())


def _gap_track(plans: list[_Plan], n_records: int) -> Track:
    """What has no value: holes of the channels, and the fill of the last data record."""
    onset: list[float] = []
    lasts: list[float] = []
    text: list[str] = []
    for plan in plans:
        channel, filled = plan.channel, n_records * plan.per_record
        ranges = [(GAP, start, stop) for start, stop in plan.holes]
        if filled > channel.n_samples:
            ranges.append((FILL, channel.n_samples, filled))
        for kind, start, stop in ranges:
            onset.append(start / channel.sampling_rate)
            lasts.append((stop - start) / channel.sampling_rate)
            text.append(hole_text(channel.label, kind))
    return Track.build(onset, text, duration_s=lasts if lasts else 0.0)


def _annotation_signal(
    track: Track, n_records: int, duration_s: float, fraction_s: float, sample_bytes: int
) -> tuple[list[bytes], int]:
    """The annotation signal of every data record, and its width in bytes."""
    stamps = [encode(fraction_s + k * duration_s, 0.0, "") for k in range(n_records)]
    text = track.text
    tals = [encode(on + fraction_s, last, str(word)) for on, last, word in zip(track.onset_s, track.duration_s, text, strict=True)]
    homes = np.clip(np.floor(track.onset_s / duration_s), 0, n_records - 1).astype(np.int64)
    laid, room = spread(stamps, tals, np.maximum.accumulate(homes) if len(homes) else homes)
    width = -(-max(room, 16) // sample_bytes) * sample_bytes
    return laid, width


def _block(plans: list[_Plan], annotations: list[bytes], width: int, first: int, last: int, sample_bytes: int) -> bytes:
    """Data records `first` to `last` as bytes."""
    columns = []
    for plan in plans:
        values = plan.integers(first * plan.per_record, last * plan.per_record).reshape(last - first, plan.per_record)
        if sample_bytes == 2:
            columns.append(np.ascontiguousarray(values, dtype="<i2").view(np.uint8))
        else:
            wide = np.ascontiguousarray(values, dtype="<i4").view(np.uint8).reshape(last - first, -1, 4)
            columns.append(wide[:, :, :3].reshape(last - first, -1))
    notes = np.frombuffer(b"".join(a.ljust(width, b"\0") for a in annotations), dtype=np.uint8).reshape(last - first, width)
    return np.concatenate([*columns, notes], axis=1).tobytes()


def _header(
    recording: Recording, plans: list[_Plan], n_records: int, duration: Fraction, annotation_samples: int, sample_bytes: int
) -> bytes:
    bdf = sample_bytes == 3
    start = recording.start_time or datetime(1985, 1, 1)
    long_date = f"{start.day:02d}-{MONTHS[start.month - 1]}-{start.year}" if recording.start_time else "X"
    words = recording.header.get("edf.recording", "").split(" ", 2)
    rest = words[2] if words[0] == "Startdate" and len(words) == 3 else "X X X"
    year = f"{start.year % 100:02d}" if 1985 <= start.year <= 2084 else "yy"
    main = [
        b"\xffBIOSEMI" if bdf else b"0       ",
        ascii_field(recording.header.get("edf.patient") or "X X X X", 80, "patient field"),
        ascii_field(f"Startdate {long_date} {rest}", 80, "recording field"),
        f"{start.day:02d}.{start.month:02d}.{year}".encode(),
        start.strftime("%H.%M.%S").encode(),
        _text(256 * (len(plans) + 2), 8),
        _text("BDF+C" if bdf else "EDF+C", 44),
        _text(n_records, 8),
        number_field(float(duration), "duration of a data record"),
        _text(len(plans) + 1, 4),
    ]
    half = 2 ** (8 * sample_bytes - 1)
    annotation = ["BDF Annotations" if bdf else "EDF Annotations", "", "", -1, 1, -half, half - 1, "", annotation_samples, ""]
    rows = zip(*(_fields(plan) for plan in plans), [_text(v, w) for v, w in zip(annotation, _WIDTHS, strict=True)], strict=True)
    return b"".join(main) + b"".join(field for row in rows for field in row)


def _text(value: object, width: int) -> bytes:
    return str(value).encode("ascii").ljust(width)


def _fields(plan: _Plan) -> list[bytes]:
    """The signal header of a channel, field by field."""
    channel, calibration = plan.channel, plan.calibration
    return [
        ascii_field(channel.label, 16, "label"),
        ascii_field(channel.transducer, 80, "transducer"),
        ascii_field(channel.unit, 8, f"channel {channel.label!r}, unit"),
        _limit(plan, "physical_min", calibration.physical_min),
        _limit(plan, "physical_max", calibration.physical_max),
        _text(calibration.digital_min, 8),
        _text(calibration.digital_max, 8),
        ascii_field(channel.prefilter, 80, "prefilter"),
        _text(plan.per_record, 8),
        ascii_field(channel.header.get("edf.reserved", ""), 32, "reserved field"),
    ]


def _limit(plan: _Plan, name: str, value: float) -> bytes:
    """The source's own text of a limit where it says the same number, else the nearest that fits."""
    text = plan.channel.header.get(f"edf.{name}", "")
    try:
        if text and float(text) == value:
            return text.encode("ascii").ljust(8)
    except ValueError:
        pass
    return number_field(value, f"channel {plan.channel.label!r}, {name}")
