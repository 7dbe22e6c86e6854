"""EDF, EDF+, BDF and BDF+ files into a Recording. Samples stay on disk until asked for."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import replace
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from caval.errors import FileError
from caval.recording import Calibration, Channel, Recording
from caval.track import Track
from caval_edf.header import Header, SignalHeader, read_header
from caval_edf.tal import FILL, GAP, decode, hole_texts

__all__ = ["read_annotations", "read_edf"]

_LATEST_START_S = 366 * 86400.0
"""Strangers put more than the fraction of a second before their first data record; a year is a broken file."""


def read_edf(path: Path) -> Recording:
    """Open an EDF or BDF file.

    Every signal keeps its own rate and its stored integers; header text that another format cannot hold stays in `header` under
    ``edf.`` names. Annotations of all annotation signals are in ``tracks["annotations"]``, on the clock of the first sample. Gaps
    between the data records of EDF+D, and those that caval's own writer notes (``BAD_CVP/missing``), are gaps of the channels.

    Raises
    ------
    FileError
        No such file, not EDF or BDF, a broken header, or a file shorter or longer than its header says.
    """
    path = Path(path)
    if not path.is_file():
        raise FileError(f"no such file: {path}")
    header = read_header(path)
    records = _records(path, header)
    starts, track = _annotations(header, records, path.name)
    first_s = float(starts[0]) if len(starts) and np.isfinite(starts[0]) else 0.0
    if abs(first_s) > _LATEST_START_S:
        raise FileError(f"{path.name}: its first data record is said to begin at {first_s:g} s; EDF+ allows the fraction of a second there")
    onsets = _record_onsets(header, starts, first_s, path.name)
    channels, position = [], 0
    for signal in header.signals:
        if not signal.is_annotation:
            channels.append(_channel(header, signal, records, position, onsets))
        position += signal.n_samples
    start = None if header.is_undated and not first_s else header.start_time
    start_time: datetime | None = None if start is None else start + timedelta(seconds=first_s)
    notes = tuple(_notes(header, starts, first_s))
    main = {f"edf.{k}": header.text[k] for k in ("patient", "recording", "reserved", "record_duration", "startdate")}
    recording = Recording(path.stem, tuple(channels), start_time, {"annotations": track}, main, "edf", path, notes, (path,))
    return _with_noted_gaps(recording)


def _notes(header: Header, starts: NDArray[np.float64], first_s: float) -> Iterator[str]:
    """What is odd about the file, one line each."""
    if header.start_time is None:
        yield f"start {header.text['startdate']!r} {header.text['starttime']!r} is no date and time; left out"
    if header.left_bytes:
        yield f"the file was not closed by its recorder; {header.left_bytes} bytes of a data record cut short are left out"
    if not header.has_gaps and len(starts):
        off_s = np.abs(starts - first_s - np.arange(len(starts)) * header.record_duration_s)
        if np.nanmax(off_s, initial=0.0) > max(header.record_duration_s / 2, 1e-3):
            yield f"said to be continuous, but data record {int(np.nanargmax(off_s))} claims another time; read as continuous"


def read_annotations(path: Path) -> Track:
    """The annotations of an EDF+ or BDF+ file."""
    return read_edf(path).tracks["annotations"]


def _records(path: Path, header: Header) -> NDArray[np.uint8]:
    """The data records as bytes, shape (records, bytes a record), on disk."""
    shape = (header.n_records, header.record_samples * header.sample_bytes)
    if 0 in shape:
        return np.empty(shape, dtype=np.uint8)
    return np.memmap(path, dtype=np.uint8, mode="r", offset=header.header_bytes, shape=shape)


def _annotations(header: Header, records: NDArray[np.uint8], name: str) -> tuple[NDArray[np.float64], Track]:
    """Start of each data record, and all annotations on the clock of the first sample."""
    starts = np.empty(0)
    onsets: list[float] = []
    durations: list[float] = []
    texts: list[str] = []
    position = 0
    for signal in header.signals:
        width = signal.n_samples * header.sample_bytes
        if signal.is_annotation and width:
            column = np.ascontiguousarray(records[:, position : position + width])
            kept, at, lasts, words = decode([row.tobytes() for row in column], name)
            starts = kept if not len(starts) else starts
            onsets += at
            durations += lasts
            texts += words
        position += width
    zero = float(starts[0]) if len(starts) and np.isfinite(starts[0]) else 0.0
    return starts, Track.build(np.asarray(onsets, dtype=float) - zero, texts, duration_s=np.asarray(durations, dtype=float))


def _record_onsets(header: Header, starts: NDArray[np.float64], first_s: float, name: str) -> NDArray[np.float64] | None:
    """Time of each data record after the first; None when they follow one another."""
    if not header.has_gaps or not header.n_records:
        return None
    onsets = starts - first_s
    if len(onsets) != header.n_records or not np.isfinite(onsets).all() or (np.diff(onsets) < header.record_duration_s - 1e-6).any():
        raise FileError(f"{name}: the times of its data records are missing or overlap; an EDF+D file needs one for each")
    return onsets


def _channel(
    header: Header, signal: SignalHeader, records: NDArray[np.uint8], position: int, onsets: NDArray[np.float64] | None
) -> Channel:
    per_record = signal.n_samples
    rate = per_record / header.record_duration_s
    stored = _stored(records, position * header.sample_bytes, per_record, header.sample_bytes)
    count, gaps = header.n_records * per_record, np.empty((0, 2), dtype=np.int64)
    if onsets is not None and per_record:
        # one rounding for all, and none that lets a record begin before the one ahead of it ends
        ahead = np.arange(header.n_records, dtype=np.int64) * per_record
        first = np.maximum.accumulate(np.floor(onsets * rate + 0.5 + 1e-6).astype(np.int64) - ahead) + ahead
        stored, count, gaps = _on_the_clock(stored, first, per_record)
    text = {f"edf.{k}": v for k, v in signal.text.items() if k in ("label", "unit", "physical_min", "physical_max", "reserved")}
    limits = Calibration(signal.digital_min, signal.digital_max, signal.physical_min, signal.physical_max)
    t = signal.text
    if not per_record:
        raise FileError(f"signal {t['label']!r} has no samples in a data record")
    return Channel(t["label"], t["unit"], rate, count, stored, limits, 0.0, gaps, t["transducer"], t["prefilter"], text)


def _stored(records: NDArray[np.uint8], offset: int, per_record: int, sample_bytes: int) -> Callable[[int, int], NDArray]:
    """Source of a signal's stored integers by sample number."""

    def source(start: int, stop: int) -> NDArray:
        if stop <= start:
            return np.empty(0, dtype=np.int16 if sample_bytes == 2 else np.int32)
        first, last = start // per_record, (stop - 1) // per_record + 1
        raw = np.ascontiguousarray(records[first:last, offset : offset + per_record * sample_bytes]).reshape(-1)
        skip = start - first * per_record
        if sample_bytes == 2:
            return raw.view("<i2")[skip : skip + stop - start]
        triple = raw.reshape(-1, 3)[skip : skip + stop - start]
        wide = np.zeros((len(triple), 4), dtype=np.uint8)
        wide[:, 1:] = triple
        return wide.view("<i4").reshape(-1) >> 8  # the shift back carries the sign

    return source


def _on_the_clock(
    stored: Callable[[int, int], NDArray], first: NDArray[np.int64], per_record: int
) -> tuple[Callable[[int, int], NDArray], int, NDArray[np.int64]]:
    """A source by place on the clock for data records that begin at samples `first`, with the sample ranges of the gaps."""
    ends = first + per_record
    apart = np.flatnonzero(first[1:] > ends[:-1])
    gaps = np.stack([ends[apart], first[apart + 1]], axis=1).astype(np.int64)

    def source(start: int, stop: int) -> NDArray:
        out = np.zeros(max(0, stop - start), dtype=stored(0, 1).dtype)
        for record in range(int(np.searchsorted(ends, start, "right")), int(np.searchsorted(first, stop))):
            low, high = max(start, int(first[record])), min(stop, int(ends[record]))
            shift = record * per_record - int(first[record])
            out[low - start : high - start] = stored(low + shift, high + shift)
        return out

    return source, int(ends[-1]), gaps


def _with_noted_gaps(recording: Recording) -> Recording:
    """Gaps that our writer noted as annotations back into the channels, and the fill of the last data record off their ends."""
    track = recording.tracks["annotations"]
    text = track.text
    noted = np.zeros(len(track), dtype=bool)
    channels = []
    names = (hole_texts(recording.labels, kind) for kind in (GAP, FILL))
    for channel, gap_name, fill_name in zip(recording.channels, *names, strict=True):
        is_gap, is_fill = text == gap_name, text == fill_name
        if is_gap.any() or is_fill.any():
            noted |= is_gap | is_fill
            start, stop, fill = (
                np.rint(times * channel.sampling_rate).astype(np.int64)
                for times in (track.onset_s[is_gap], (track.onset_s + track.duration_s)[is_gap], track.onset_s[is_fill])
            )
            count = max(0, int(min([channel.n_samples, *fill])))
            gaps = np.concatenate([channel.gaps, np.clip(np.stack([start, stop], axis=1), 0, count)])
            channel = replace(channel, n_samples=count, gaps=gaps[np.argsort(gaps[:, 0], kind="stable")])
        channels.append(channel)
    if not noted.any():
        return recording
    return replace(recording, channels=tuple(channels), tracks={"annotations": track.take(~noted)})
