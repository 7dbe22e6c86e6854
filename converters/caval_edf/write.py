"""A Recording into an EDF+ or BDF+ file: integers travel, never floats."""

from __future__ import annotations

import os
from dataclasses import replace
from datetime import datetime
from fractions import Fraction
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from caval.errors import FileError, InputError
from caval.recording import Recording
from caval.track import Track
from caval.vocabulary import parse_text
from caval_edf.header import MONTHS, ascii_field, free_field, number_field
from caval_edf.plan import Plan, calibration_for, plan_channel, record_duration
from caval_edf.tal import FILL, GAP, encode, hole_texts, spread

__all__ = ["write_edf", "write_marked"]

_BLOCK_RECORDS = 256
_WIDTHS = (16, 80, 8, 8, 8, 8, 8, 80, 8, 32)


def write_edf(recording: Recording, path: Path) -> tuple[Path, ...]:
    """Write an .edf (16 bit) or .bdf (24 bit) file with all channels at their own rates and all tracks as annotations.

    Stored integers and calibration limits are copied. A channel of floats gets a fixed range for its kind (pressures steps of
    0.01 mmHg, ECG of 1 µV), ten times wider as often as the data need it. Gaps and missing values are noted as
    annotations ``BAD_LABEL/missing``, and the samples that fill the last data record up (the last value, repeated) as ``BAD_LABEL/fill``;
    the reader turns both back. A channel that begins before or after 0 s (a skew) is laid on the record's clock to the nearest sample:
    what lies before 0 is left out, as every reader of skewed records does. Patient, recording, transducer and prefilter text is
    written without accents and cut at the 80 characters of its field; free text becomes the last subfield that EDF+ allows there.

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
    duration = record_duration(recording)
    plans = [plan_channel(channel, duration, sample_bytes) for channel in recording.channels]
    n_records = max(1, *(-(-p.channel.n_samples // p.per_record) for p in plans))
    start = recording.start_time
    fraction_s = start.microsecond / 1e6 if start is not None else 0.0
    track = recording.annotations
    track = track.join(_gap_track(plans, n_records))
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
    """Write STEM_marked.edf (.bdf from a BDF file or where 16 bits are too few): the signals, the annotations of others, and `track`.

    Marks of our own that an earlier run left in the record give way to `track`.
    """
    others = {name: old.take(_is_not_ours(old)) for name, old in recording.tracks.items()}
    whole = replace(recording, tracks=others).with_track("annotations", track)
    from_bdf = recording.format == "edf" and recording.path is not None and recording.path.suffix.lower() == ".bdf"
    is_wide = from_bdf or any(calibration_for(c, 2) is None for c in recording.channels)
    return write_edf(whole, directory / f"{stem}_marked{'.bdf' if is_wide else '.edf'}")


def _is_not_ours(track: Track) -> NDArray[np.bool_]:
    return np.array([parse_text(text) is None for text in track.texts] + [True], dtype=bool)[track.code]


def _gap_track(plans: list[Plan], n_records: int) -> Track:
    """What has no value: holes of the channels, and the fill of the last data record."""
    names = [hole_texts([p.channel.label for p in plans], kind) for kind in (GAP, FILL)]
    rows: list[tuple[str, float, float]] = []
    for plan, gap_name, fill_name in zip(plans, *names, strict=True):
        n, filled, rate = plan.channel.n_samples, n_records * plan.per_record, plan.channel.sampling_rate
        rows += [(gap_name, start / rate, (stop - start) / rate) for start, stop in plan.holes.tolist()]
        if filled > n:
            rows.append((fill_name, n / rate, (filled - n) / rate))
    return Track.build([r[1] for r in rows], [r[0] for r in rows], duration_s=[r[2] for r in rows])


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


def _block(plans: list[Plan], annotations: list[bytes], width: int, first: int, last: int, sample_bytes: int) -> bytes:
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
    recording: Recording, plans: list[Plan], n_records: int, duration: Fraction, annotation_samples: int, sample_bytes: int
) -> bytes:
    bdf = sample_bytes == 3
    start = recording.start_time or datetime(1985, 1, 1)
    year = f"{start.year % 100:02d}" if 1985 <= start.year <= 2084 else "yy"
    main = [
        b"\xffBIOSEMI" if bdf else b"0       ",
        free_field(_patient(recording), 80),
        free_field(_recording(recording, start), 80),
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


def _patient(recording: Recording) -> str:
    """The patient field as EDF+ has it: code, sex, birthdate, name, and what else there is."""
    text = recording.header.get("edf.patient", "")
    words = text.split()
    is_plus = len(words) >= 4 and words[1] in ("M", "F", "X") and (words[2] == "X" or len(words[2]) == 11)
    return text if is_plus else f"X X X X {text}".strip()


def _recording(recording: Recording, start: datetime) -> str:
    """The recording field as EDF+ has it: start date, code, technician, equipment, and what else there is."""
    text = recording.header.get("edf.recording", "")
    words = text.split(" ", 2)
    is_plus = words[0] == "Startdate" and len(words) == 3 and len(words[2].split()) >= 3
    is_unknown = recording.start_time is None or (is_plus and words[1] == "X" and start.year == 1985)
    date = "X" if is_unknown else f"{start.day:02d}-{MONTHS[start.month - 1]}-{start.year}"
    return f"Startdate {date} " + (words[2] if is_plus else f"X X X {text}".strip())


def _text(value: object, width: int) -> bytes:
    return str(value).encode("ascii").ljust(width)


def _fields(plan: Plan) -> list[bytes]:
    """The signal header of a channel, field by field."""
    channel, calibration = plan.channel, plan.calibration
    return [
        ascii_field(channel.label, 16, "label"),
        free_field(channel.transducer, 80),
        ascii_field(channel.unit, 8, f"channel {channel.label!r}, unit"),
        _limit(plan, "physical_min", calibration.physical_min),
        _limit(plan, "physical_max", calibration.physical_max),
        _text(calibration.digital_min, 8),
        _text(calibration.digital_max, 8),
        free_field(channel.prefilter, 80),
        _text(plan.per_record, 8),
        free_field(channel.header.get("edf.reserved", ""), 32),
    ]


def _limit(plan: Plan, name: str, value: float) -> bytes:
    """The source's own text of a limit where it says the same number, else the nearest that fits."""
    text = plan.channel.header.get(f"edf.{name}", "")
    try:
        if text and float(text) == value:
            return text.encode("ascii").ljust(8)
    except ValueError:
        pass
    return number_field(value, f"channel {plan.channel.label!r}, {name}")
