"""WFDB records into a Recording. Samples stay on disk until asked for."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from caval.errors import FileError
from caval.recording import Calibration, Channel, Recording
from caval.track import Track
from caval_wfdb.annotation import read_annotations
from caval_wfdb.header import NO_UNIT, Header, SignalLine, is_annotation_ending, read_header
from caval_wfdb.samples import BITS, calibration_of, frames_held, source_of

__all__ = ["header_path", "read_wfdb"]


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


def _channels(hea: Path, header: Header) -> tuple[list[Channel], list[str]]:
    channels, notes = [], []
    files: dict[str, list[SignalLine]] = {}
    for line in header.signals:
        files.setdefault(line.file, []).append(line)
    for line in header.signals:
        mine = tuple(files[line.file])
        n_frames = frames_held(hea, header, mine)
        place = next(i for i, other in enumerate(mine) if other is line)
        number = next(i for i, other in enumerate(header.signals) if other is line)
        source = source_of(hea, mine, place, number, n_frames)
        label = line.label or f"signal {number}"
        text = {f"wfdb.{k}": v for k, v in line.text.items() if k in ("fmt", "gain", "baseline", "adcres", "adczero", "unit")}
        if not line.has_gain:
            notes.append(f"{label!r} has no calibration in its header; 200 steps a mV stand in, as WFDB has it")
        spf = line.samples_per_frame
        start_s = -line.skew / header.frame_rate
        channels.append(
            Channel(label, line.unit, _rate(header, line), n_frames * spf, source, calibration_of(line), start_s, header=text)
        )
    return channels, notes


def _rate(header: Header, line: SignalLine) -> float:
    """Samples a second: 24,989 in a frame at 0.0025 Hz are 62.4725, where floats would give 62.472500000000004."""
    exact = Fraction(header.frame_rate).limit_denominator(10**6)
    return float((exact if float(exact) == header.frame_rate else Fraction(header.frame_rate)) * line.samples_per_frame)


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
    if layout is None and any(len(c) != len(template) for _, _, c in parts if c is not None):
        raise FileError(f"{hea.name}: its segments differ in their number of signals, and no layout segment comes first")
    return [_spliced(c, i, template, parts, header.frame_rate, layout is not None) for i, c in enumerate(template)], notes


def _layout_channel(line: SignalLine, header: Header) -> Channel:
    calibration = calibration_of(line if line.fmt in BITS else replace(line, fmt="16"))
    return Channel(line.label, line.unit, _rate(header, line), 0, lambda start, stop: np.zeros(stop - start, dtype=np.int16), calibration)


def _spliced(
    template: Channel, number: int, channels_of_all: list[Channel], parts: list[tuple[int, int, list[Channel] | None]],
    frame_rate: float, by_label: bool,
) -> Channel:
    """One channel over all segments, those of one label in their order. Where segments differ in calibration it holds physical values,
    else stored integers."""
    twins = sum(c.label == template.label for c in channels_of_all[:number])
    n_frames = parts[-1][0] + parts[-1][1] if parts else 0
    width = round(template.sampling_rate / frame_rate)
    pieces: list[tuple[int, int, Channel | None]] = []
    for at, count, channels in parts:
        found = None
        if channels is not None:
            same = [c for c in channels if c.label == template.label][twins:] if by_label else channels[number:]
            found = same[0] if same else None
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


def _escaped(name: str) -> str:
    return "".join(f"[{c}]" if c in "[*?" else c for c in name)


def _with_kept(recording: Recording, comments: tuple[str, ...]) -> Recording:
    """What our writer kept in comments (``caval NUMBER KEY VALUE``) back in its place: limits as text, true lengths, valid rails."""
    kept: dict[int, dict[str, str]] = {}
    for comment in comments:
        words = [*comment.split(" ", 3), ""]  # an empty value leaves no word
        if len(words) >= 4 and words[0] == "caval" and words[1].isascii() and words[1].isdecimal():
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
            told = Calibration(int(low), int(high), float(physical_low), float(physical_high), missing)
            calibration = told if _agree(told, calibration) else calibration
        n_samples = max(0, min(int(kept.get("n_samples", channel.n_samples)), channel.n_samples))
        ranges = [[int(end) for end in text.split("-")] for text in kept.get("gaps", "").split()]
        gaps = np.clip(np.array(ranges, dtype=np.int64).reshape(-1, 2), 0, n_samples) if ranges else channel.gaps
    except (ValueError, OverflowError):
        return channel  # an edited comment is no reason to fail
    unit = kept.get("unit", channel.unit)
    return replace(
        channel, header=header, calibration=calibration, n_samples=n_samples, gaps=gaps, label=kept.get("label", channel.label),
        unit="" if unit == NO_UNIT else unit,
        transducer=kept.get("transducer", ""), prefilter=kept.get("prefilter", ""),
    )


def _agree(told: Calibration, line: Calibration) -> bool:
    """Whether kept limits say what the signal line says, but for its whole-number baseline; a line that was edited since wins."""
    if told.digital_min >= told.digital_max or not np.isfinite([told.physical_min, told.physical_max]).all():
        return False
    apart = told.to_physical(np.zeros(1)) - line.to_physical(np.zeros(1))
    return bool(abs(told.scale / line.scale - 1) < 1e-6 and abs(apart[0]) < 0.51 * abs(line.scale))
