"""WFDB records into a Recording. Samples stay on disk until asked for."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from caval.errors import FileError
from caval.recording import Calibration, Channel, Recording
from caval.track import Track
from caval_wfdb.annotation import read_annotations
from caval_wfdb.header import NO_UNIT, Header, SignalLine, read_header

__all__ = ["header_path", "is_annotation_ending", "read_wfdb"]

_RANGE = {
    "80": 8, "508": 8, "310": 10, "311": 10, "212": 12, "8": 16, "16": 16, "61": 16, "160": 16, "516": 16, "24": 24, "524": 24, "32": 32,
}
"""Bits of each signal format that wfdb reads."""
_BYTES = {"16": 2.0, "61": 2.0, "160": 2.0, "212": 1.5, "310": 4 / 3, "311": 4 / 3, "24": 3.0, "32": 4.0, "80": 1.0, "8": 1.0}
"""Bytes a sample, where a format has as many for each."""
_PLAIN = {"16": ("<i2", 0), "61": (">i2", 0), "160": ("<u2", 32768), "80": ("u1", 128), "32": ("<i4", 0)}
"""Formats of whole bytes as NumPy has them, and the stored number that stands for 0."""
_NO_ANNOTATION = frozenset(("hea", "dat", "edf", "bdf", "csv", "tsv", "json", "png", "pdf", "txt", "md", "html", "gz", "zip", "parquet"))


def header_path(path: Path) -> Path:
    """The header of a record given by its header, its name, or one of its files."""
    if path.suffix == ".hea":
        return path
    by_name = path.with_name(path.name + ".hea")
    return path.with_suffix(".hea") if path.is_file() and not by_name.is_file() else by_name


def read_wfdb(path: Path) -> Recording:
    """Open a WFDB record by its .hea file or its name.

    Every signal keeps its own rate (samples a frame) and its stored integers; header text stays in `header` under ``wfdb.`` names. A
    skew moves the channel's `start_s`. Of a multi-segment record the segments follow one another; null segments, and signals that a
    segment lacks, are gaps. The lowest code of a format is the missing one. Annotation files beside the record are tracks, by ending.

    Raises
    ------
    FileError
        No such record, a header that cannot be right, names that lead out of the folder, files shorter than declared.
    """
    hea = header_path(Path(path))
    header = read_header(hea)
    files = {hea, *(hea.parent / line.file for line in header.signals)}
    if header.segments:
        channels, notes = _segmented(hea, header, files)
    else:
        channels, notes = _channels(hea, header)
    tracks, more = _tracks(hea, header.frame_rate)
    comments = "\n".join(c for c in header.comments if not c.startswith("caval "))
    main = {"wfdb.record_line": header.text["record_line"], "wfdb.comments": comments}
    if header.start_time is None and len(header.text["record_line"].split()) > 4:
        more.append(f"start time {' '.join(header.text['record_line'].split()[4:])!r} is no time with a date; left out")
    recording = Recording(
        hea.stem, tuple(channels), header.start_time, tracks, main, "wfdb", hea, (*notes, *more), (hea, *sorted(files - {hea}))
    )
    return _with_kept(recording, header.comments)


@dataclass(frozen=True, eq=False)
class _File:
    """How the signals of one file are interleaved: a frame holds `samples_per_frame` samples of each in turn."""

    path: Path
    lines: tuple[SignalLine, ...]
    n_frames: int


def _channels(hea: Path, header: Header) -> tuple[list[Channel], list[str]]:
    channels, notes = [], []
    files: dict[str, list[SignalLine]] = {}
    for line in header.signals:
        files.setdefault(line.file, []).append(line)
    for line in header.signals:
        mine = tuple(files[line.file])
        n_frames = _frames(hea, header, mine)
        place = next(i for i, other in enumerate(mine) if other is line)
        number = next(i for i, other in enumerate(header.signals) if other is line)
        source = _memory_mapped(hea, mine, place, n_frames) if line.fmt in _PLAIN else _through_wfdb(hea, line, number)
        label = line.label or f"signal {number}"
        text = {f"wfdb.{k}": v for k, v in line.text.items() if k in ("fmt", "gain", "baseline", "adcres", "adczero", "unit")}
        if not line.has_gain:
            notes.append(f"{label!r} has no calibration in its header; 200 steps a mV stand in, as WFDB has it")
        spf = line.samples_per_frame
        start_s = -line.skew / header.frame_rate
        channels.append(
            Channel(label, line.unit, header.frame_rate * spf, n_frames * spf, source, _calibration(line), start_s, header=text)
        )
    return channels, notes


def _calibration(line: SignalLine) -> Calibration:
    bits = _RANGE.get(line.fmt)
    if bits is None:
        raise FileError(f"signal format {line.fmt} of {line.file!r} is not one that can be read; these can: {', '.join(_RANGE)}")
    low, high = -(2 ** (bits - 1)), 2 ** (bits - 1) - 1
    return Calibration(low, high, (low - line.baseline) / line.gain, (high - line.baseline) / line.gain, missing=low)


def _frames(hea: Path, header: Header, lines: tuple[SignalLine, ...]) -> int:
    """Frames in a file, the header's number checked against its size."""
    path = hea.parent / lines[0].file
    if not path.is_file():
        raise FileError(f"{hea.name} names {path.name}, which is not beside it")
    if len({(line.fmt, line.offset) for line in lines}) > 1:
        raise FileError(f"{hea.name}: the signals of {path.name} differ in format or offset")
    size = path.stat().st_size - lines[0].offset
    per_sample = _BYTES.get(lines[0].fmt)
    declared = header.n_frames
    if per_sample is None:
        if declared is None:
            raise FileError(f"{hea.name} does not say how many samples {path.name} holds")
        return declared
    held = int(size / (per_sample * sum(line.samples_per_frame for line in lines)) + 1e-9)
    if declared is None:
        return held
    if held < declared:
        raise FileError(f"{path.name} is truncated: {hea.name} declares {declared} frames, it holds {held}")
    return declared


def _memory_mapped(hea: Path, lines: tuple[SignalLine, ...], place: int, n_frames: int) -> Callable[[int, int], NDArray]:
    """Source of a signal of a file in which every sample is a number of whole bytes."""
    widths = [line.samples_per_frame for line in lines]
    first, width, frame = sum(widths[:place]), widths[place], sum(widths)
    path, offset = hea.parent / lines[0].file, lines[0].offset
    dtype, zero = _PLAIN[lines[0].fmt]

    def source(start: int, stop: int) -> NDArray:
        if stop <= start:
            return np.empty(0, dtype=np.int32)
        frames = np.memmap(path, dtype=dtype, mode="r", offset=offset, shape=(n_frames, frame))
        low, high = start // width, (stop - 1) // width + 1
        stored = np.ascontiguousarray(frames[low:high, first : first + width]).reshape(-1)[start - low * width : stop - low * width]
        return stored.astype(np.int32) - zero if zero else stored

    return source


def _through_wfdb(hea: Path, line: SignalLine, number: int) -> Callable[[int, int], NDArray]:
    """Source of a signal in any other format, by the wfdb package."""
    width = line.samples_per_frame

    def source(start: int, stop: int) -> NDArray:
        import wfdb

        if stop <= start:
            return np.empty(0, dtype=np.int32)
        low, high = start // width, (stop - 1) // width + 1
        try:
            record = wfdb.rdrecord(
                str(hea.with_suffix("")), sampfrom=low, sampto=high, channels=[number], physical=False, smooth_frames=False,
                ignore_skew=True,
            )
        except (ValueError, IndexError, OSError) as error:
            raise FileError(f"{hea.name}: signal {number} cannot be read ({error})") from error
        return np.asarray(record.e_d_signal[0])[start - low * width : stop - low * width]

    return source


def _segmented(hea: Path, header: Header, files: set[Path]) -> tuple[list[Channel], list[str]]:
    """Channels of a multi-segment record: by label where the first segment is a layout of no length, else by position.

    The files of the segments are put into `files`.
    """
    parts: list[tuple[int, int, list[Channel] | None]] = []
    at, notes = 0, []
    layout: list[Channel] | None = None
    for segment in header.segments:
        if segment.name == "~":
            parts.append((at, segment.n_frames, None))
        else:
            own = read_header(hea.with_name(segment.name + ".hea"))
            if own.segments:
                raise FileError(f"{hea.name}: segment {segment.name!r} is itself made of segments, which is not allowed")
            if own.frame_rate != header.frame_rate:
                raise FileError(f"{hea.name}: segment {segment.name!r} has {own.frame_rate:g} Hz, the record {header.frame_rate:g} Hz")
            files |= {hea.with_name(segment.name + ".hea")}
            if segment.n_frames == 0 and layout is None and not parts:
                layout = [_layout_channel(line, own) for line in own.signals]
                continue
            if own.n_frames is not None and own.n_frames < segment.n_frames:
                raise FileError(f"{hea.name}: segment {segment.name!r} has {own.n_frames} samples, not the {segment.n_frames} declared")
            files |= {hea.parent / line.file for line in own.signals}
            channels, said = _channels(hea.with_name(segment.name + ".hea"), replace(own, n_frames=own.n_frames or segment.n_frames))
            notes += said
            parts.append((at, segment.n_frames, channels))
        at += segment.n_frames
    if header.n_frames is not None and header.n_frames != at:
        raise FileError(f"{hea.name} declares {header.n_frames} samples; its segments have {at}")
    template = layout if layout is not None else next((c for _, _, c in parts if c is not None), [])
    return [_spliced(c, i, parts, at, header.frame_rate, layout is not None) for i, c in enumerate(template)], notes


def _layout_channel(line: SignalLine, header: Header) -> Channel:
    rate = header.frame_rate * line.samples_per_frame
    calibration = _calibration(line if line.fmt in _RANGE else replace(line, fmt="16"))
    return Channel(line.label, line.unit, rate, 0, lambda start, stop: np.zeros(stop - start, dtype=np.int16), calibration)


def _spliced(
    template: Channel, number: int, parts: list[tuple[int, int, list[Channel] | None]], n_frames: int, frame_rate: float, by_label: bool
) -> Channel:
    """One channel over all segments. Where segments differ in calibration it holds physical values, else stored integers."""
    width = round(template.sampling_rate / frame_rate)
    pieces: list[tuple[int, int, Channel | None]] = []
    for at, count, channels in parts:
        found = None
        if channels is not None:
            found = next((c for c in channels if c.label == template.label), None) if by_label else channels[number]
        if found is not None and (found.sampling_rate != template.sampling_rate or found.unit != template.unit):
            raise FileError(f"channel {template.label!r} changes its rate or unit from one segment to the next")
        pieces.append((at * width, (at + count) * width, found))
    calibrations = {c.calibration for _, _, c in pieces if c is not None}
    whole = len(calibrations) <= 1
    gaps = np.array([(low, high) for low, high, c in pieces if c is None and high > low], dtype=np.int64).reshape(-1, 2)

    def source(start: int, stop: int) -> NDArray:
        out = np.zeros(max(0, stop - start), dtype=np.int32 if whole else np.float64)
        for low, high, channel in pieces:
            first, last = max(start, low), min(stop, high)
            if channel is not None and last > first:
                read = channel.digital if whole else channel.physical
                out[first - start : last - start] = read(first - low, last - low)
        return out

    calibration = (calibrations.pop() if calibrations else template.calibration) if whole else None
    return replace(template, n_samples=n_frames * width, source=source, calibration=calibration, gaps=gaps)


def _tracks(hea: Path, frame_rate: float) -> tuple[dict[str, Track], list[str]]:
    """Annotation files beside the record; a file that is none is noted and left."""
    tracks: dict[str, Track] = {}
    notes = []
    for path in sorted(hea.parent.glob(f"{_escaped(hea.stem)}.*")):
        ending = path.name[len(hea.stem) + 1 :]
        if not is_annotation_ending(ending) or not path.is_file():
            continue
        try:
            tracks[ending] = read_annotations(path, default_rate=frame_rate)
        except FileError as error:
            notes.append(f"annotations left out: {error}")
    return tracks, notes


def is_annotation_ending(ending: str) -> bool:
    """Whether a file ending could be the name of an annotator: letters and digits, and not that of another kind of file."""
    return ending.isalnum() and ending.lower() not in _NO_ANNOTATION


def _escaped(name: str) -> str:
    return "".join(f"[{c}]" if c in "[*?" else c for c in name)


def _with_kept(recording: Recording, comments: tuple[str, ...]) -> Recording:
    """What our writer kept in comments (``caval NUMBER KEY VALUE``) back in its place: limits as text, true lengths, valid rails."""
    kept: dict[int, dict[str, str]] = {}
    for comment in comments:
        words = comment.split(" ", 3)
        if len(words) == 4 and words[0] == "caval" and words[1].isdigit():
            kept.setdefault(int(words[1]), {})[words[2]] = words[3]
    if not kept:
        return recording
    channels = list(recording.channels)
    for number, values in kept.items():
        if number < len(channels):
            channels[number] = _restored(channels[number], values)
    return replace(recording, channels=tuple(channels))


def _restored(channel: Channel, kept: dict[str, str]) -> Channel:
    header = {**channel.header, **{k: v for k, v in kept.items() if k.startswith("edf.")}}
    calibration = channel.calibration
    try:
        if "limits" in kept and calibration is not None:
            low, high, physical_low, physical_high = kept["limits"].split()
            missing = None if "rail" in kept or "whole" in kept else calibration.missing
            calibration = Calibration(int(low), int(high), float(physical_low), float(physical_high), missing)
        n_samples = min(int(kept.get("n_samples", channel.n_samples)), channel.n_samples)
        ranges = [[int(end) for end in text.split("-")] for text in kept.get("gaps", "").split()]
        gaps = np.array(ranges, dtype=np.int64).reshape(-1, 2) if ranges else channel.gaps
    except ValueError:
        return channel  # an edited comment is no reason to fail
    unit = kept.get("unit", channel.unit)
    return replace(
        channel, header=header, calibration=calibration, n_samples=n_samples, gaps=gaps, label=kept.get("label", channel.label),
        unit="" if unit == NO_UNIT else unit,
        transducer=kept.get("transducer", ""), prefilter=kept.get("prefilter", ""),
    )
