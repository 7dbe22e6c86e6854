"""A Recording into a WFDB record, and a track into an annotation file: integers travel, never floats."""

from __future__ import annotations

import os
import re
from dataclasses import replace
from fractions import Fraction
from math import gcd, lcm
from pathlib import Path

import numpy as np

from caval.errors import FileError, InputError
from caval.recording import Calibration, Channel, Recording
from caval.track import Track
from caval.vocabulary import parse_text
from caval_wfdb.annotation import TRACK_ENDING, track_bytes
from caval_wfdb.frames import BITS, write_samples
from caval_wfdb.header import NO_UNIT, is_annotation_ending

__all__ = ["ticks_per_second", "write_marked", "write_wfdb"]

_SPELLINGS = str.maketrans({"µ": "u", "μ": "u", "₂": "2", "°": "deg"})


def write_wfdb(recording: Recording, path: Path) -> tuple[Path, ...]:
    """Write NAME.hea, NAME.dat and an annotation file for each track, by the track's name.

    Rates become samples a frame. Stored integers are copied, in format 16 (or 212 where the source had it, 24 or 32 where the integers
    need it). WFDB's whole-number baseline cannot hold every calibration, and its missing code is a value elsewhere: what it cannot hold
    (limits, true lengths, labels) stands in comments ``caval NUMBER KEY VALUE``, which the reader puts back. Gaps become the missing code.

    Raises
    ------
    InputError
        Rates without a common frame, integers of more than 32 bits, a name or an annotation that WFDB cannot hold.
    FileError
        The files cannot be written.
    """
    path = Path(path)
    if not recording.channels:
        raise InputError(f"{recording.name!r} has no channel to write")
    name = path.name.removesuffix(path.suffix)
    if not re.fullmatch(r"[-\w]+", name, re.ASCII):
        raise InputError(f"record name {name!r}: WFDB allows letters, digits, '_' and '-' in it; give the output another name")
    frame_rate, widths = _frame(recording)
    n_frames = max(-(-c.n_samples // w) for c, w in zip(recording.channels, widths, strict=True))
    fmt = _format(recording)
    low, high = -(2 ** (BITS[fmt] - 1)), 2 ** (BITS[fmt] - 1) - 1
    calibrations = [c.integer_calibration(low + 1, high) for c in recording.channels]
    data, header = path.with_suffix(".dat"), path.with_suffix(".hea")
    written = [header, data]
    try:
        with open(data, "wb") as stream:
            sums, firsts, rails = write_samples(stream, recording, calibrations, widths, n_frames, fmt)
            stream.flush()
            os.fsync(stream.fileno())
        lines = [_record_line(recording, name, frame_rate, n_frames)]
        comments = [c for c in recording.header.get("wfdb.comments", "").splitlines() if c]
        for i, (channel, calibration, width) in enumerate(zip(recording.channels, calibrations, widths, strict=True)):
            lines.append(_signal_line(channel, calibration, f"{name}.dat", fmt, width, frame_rate, firsts[i], sums[i]))
            comments += [f"caval {i} {key} {value}" for key, value in _kept(channel, calibration, width * n_frames, low, rails[i]).items()]
        header.write_text("\n".join([*lines, *(f"# {' '.join(c.splitlines())}" for c in comments)]) + "\n", encoding="utf-8")
        for ending, track in _by_ending(recording).items():
            target = path.with_suffix(f".{ending}")
            target.write_bytes(track_bytes(track, ticks_per_second(recording)))
            written.append(target)
    except OSError as error:
        if isinstance(error, FileError):
            raise
        raise FileError(f"cannot write {path}: {error.strerror or error}") from error
    return tuple(written)


def write_marked(recording: Recording, track: Track, directory: Path, stem: str) -> tuple[Path, ...]:
    """Write `track` as STEM.cvp; for a recording that is no WFDB record also the record itself, with the annotations of others.

    Marks of our own that an earlier run left in such a record give way to `track`. A track without a mark gives no annotation file,
    whatever spans it has: a reader that finds one finds marks in it.
    """
    written: list[Path] = []
    if recording.format != "wfdb":
        others = {name: _of_others(old) for name, old in recording.tracks.items()}
        written += write_wfdb(replace(recording, tracks=others), directory / f"{stem}.hea")
    if len(track.marks()):
        target = directory / f"{stem}.{TRACK_ENDING}"
        target.write_bytes(track_bytes(track, ticks_per_second(recording)))
        written.append(target)
    return tuple(written)


def _of_others(track: Track) -> Track:
    return track.take(np.array([parse_text(text) is None for text in track.texts] + [True], dtype=bool)[track.code])


def _by_ending(recording: Recording) -> dict[str, Track]:
    """Tracks by file ending: ``annotations`` of EDF+ goes to ``atr``, and characters that no ending has are left out of it."""
    found: dict[str, Track] = {}
    for name, track in recording.tracks.items():
        ending = "atr" if name == "annotations" else "".join(c for c in name if c.isalnum() and c.isascii())
        if len(track):
            ending = ending if is_annotation_ending(ending) else f"{ending}ann"
            found[ending] = found.get(ending, Track.empty()).join(track)
    return found


def ticks_per_second(recording: Recording) -> float:
    """Ticks of our annotation files: the rate of the fastest channel."""
    return max(c.sampling_rate for c in recording.channels)


def _frame(recording: Recording) -> tuple[Fraction, list[int]]:
    """Frames a second, and the samples of each channel in one."""
    rates = [Fraction(c.sampling_rate).limit_denominator(10**6) for c in recording.channels]
    scale = lcm(*(r.denominator for r in rates))
    frame_rate = Fraction(gcd(*(int(r * scale) for r in rates)), scale)
    widths = [int(r / frame_rate) for r in rates]
    if sum(widths) > 10**6:
        listed = ", ".join(f"{c.label} {c.sampling_rate:.9g} Hz" for c in recording.channels)
        raise InputError(f"no frame holds whole samples of every channel ({listed}); resample one of them")
    return frame_rate, widths


def _format(recording: Recording) -> str:
    ranges = [(c.calibration.digital_min, c.calibration.digital_max) for c in recording.channels if c.calibration is not None]
    low, high = min((r[0] for r in ranges), default=0), max((r[1] for r in ranges), default=0)
    if ranges and len(ranges) == len(recording.channels) and all(c.header.get("wfdb.fmt") == "212" for c in recording.channels):
        return "212"
    for fmt in ("16", "24", "32"):
        if -(2 ** (BITS[fmt] - 1)) <= low and high < 2 ** (BITS[fmt] - 1):
            return fmt
    raise InputError(f"integers from {low} to {high}: WFDB holds 32 bits")


def _number(value: float) -> str:
    return repr(int(value)) if value == int(value) else repr(value)


def _record_line(recording: Recording, name: str, frame_rate: Fraction, n_frames: int) -> str:
    line = f"{name} {len(recording.channels)} {_number(float(frame_rate))} {n_frames}"
    start = recording.start_time
    if start is None:
        return line
    clock = start.strftime("%H:%M:%S") + (f".{start.microsecond:06d}".rstrip("0") if start.microsecond else "")
    return f"{line} {clock} {start.strftime('%d/%m/%Y')}"


def _signal_line(
    channel: Channel, calibration: Calibration, file: str, fmt: str, width: int, frame_rate: Fraction, first: int, total: int
) -> str:
    gain, baseline = _gain(channel, calibration)
    skew = round(-channel.start_s * float(frame_rate))
    if skew < 0 or abs(skew + channel.start_s * float(frame_rate)) > 1e-3:
        raise InputError(
            f"channel {channel.label!r} begins at {channel.start_s:.6g} s; WFDB holds a channel that begins whole frames of "
            f"{1 / float(frame_rate):.6g} s before 0, no other"
        )
    checksum = (total + 32768) % 65536 - 32768
    bits = BITS[fmt]
    place = f"{file} {fmt}" + (f"x{width}" if width > 1 else "") + (f":{skew}" if skew > 0 else "")
    return f"{place} {gain}({baseline})/{_unit(channel.unit)} {bits} 0 {first} {checksum} 0 {_plain(channel.label)}"


def _unit(unit: str) -> str:
    """A unit as other readers take it: ASCII, in one word, ``NU`` for none (where nothing stands they read mV)."""
    text = unit.translate(_SPELLINGS).encode("ascii", "ignore").decode("ascii")
    return "".join(c for c in text if c.isalnum() or c in "^-?%/_") or "NU"


def _plain(label: str) -> str:
    return " ".join(label.translate(_SPELLINGS).encode("ascii", "replace").decode("ascii").split()) or "signal"


def _gain(channel: Channel, calibration: Calibration) -> tuple[str, int]:
    """Steps a unit as text, and the step of 0: the source's own where it came from WFDB."""
    own, zero = channel.header.get("wfdb.gain"), channel.header.get("wfdb.baseline") or channel.header.get("wfdb.adczero") or "0"
    scale = calibration.scale
    baseline = round(calibration.digital_min - calibration.physical_min / scale)
    if own is not None and abs(float(own) * scale - 1.0) < 1e-9 and int(zero) == baseline:
        return own, baseline
    return _number(float(f"{1.0 / scale:.12g}")), baseline


def _kept(channel: Channel, calibration: Calibration, held: int, missing: int, rails: int) -> dict[str, str]:
    """What a signal line cannot say, by key."""
    gain, baseline = _gain(channel, calibration)
    low, high = calibration.digital_min, calibration.digital_max
    implied = Calibration(missing, -missing - 1, (missing - baseline) / float(gain), (-missing - 1 - baseline) / float(gain), missing)
    travelling = ("edf.physical_min", "edf.physical_max", "edf.label", "edf.reserved")
    kept = {key: value for key, value in channel.header.items() if key in travelling and value}
    if channel.calibration is None or calibration != implied:
        kept["limits"] = f"{low} {high} {calibration.physical_min!r} {calibration.physical_max!r}"
    if calibration.missing is None and not len(channel.holes()):
        kept["whole"] = "no sample is missing"
    if rails:
        kept["rail"] = f"{rails} samples of {missing} are values, not missing"
        if len(channel.holes()):
            kept["gaps"] = " ".join(f"{start}-{stop}" for start, stop in channel.holes().tolist())
    if _unit(channel.unit) != channel.unit:
        kept["unit"] = channel.unit or NO_UNIT
    if held != channel.n_samples:
        kept["n_samples"] = str(channel.n_samples)
    if _plain(channel.label) != channel.label:
        kept["label"] = channel.label
    for key, value in (("transducer", channel.transducer), ("prefilter", channel.prefilter)):
        if value:
            kept[key] = value
    return kept
