"""Signal files of WFDB records (WFDB Applications Guide, signal(5)): stored integers by sample number, read when asked for."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from caval.errors import FileError
from caval.recording import Calibration
from caval_wfdb.header import Header, SignalLine

__all__ = ["BITS", "calibration_of", "frames_held", "source_of"]

BITS = {
    "80": 8, "508": 8, "310": 10, "311": 10, "212": 12, "8": 16, "16": 16, "61": 16, "160": 16, "516": 16, "24": 24, "524": 24, "32": 32,
}
"""Bits of each signal format that wfdb reads."""
_BYTES = {"16": 2.0, "61": 2.0, "160": 2.0, "212": 1.5, "310": 4 / 3, "311": 4 / 3, "24": 3.0, "32": 4.0, "80": 1.0, "8": 1.0}
"""Bytes a sample, where a format has as many for each."""
_PLAIN = {"16": ("<i2", 0), "61": (">i2", 0), "160": ("<u2", 32768), "80": ("u1", 128), "32": ("<i4", 0), "8": ("i1", 0)}
"""Formats of whole bytes as NumPy has them, and the stored number that stands for 0."""
_BLOCK = 1 << 20
_MOST_FRAMES_A_BYTE = 8192
"""Of FLAC, whose tightest block holds 65,535 samples in 14 bytes."""


def calibration_of(line: SignalLine) -> Calibration:
    """Calibration of a signal over the whole range of its format, whose lowest code is the missing one."""
    bits = BITS.get(line.fmt)
    if bits is None:
        raise FileError(f"signal format {line.fmt} of {line.file!r} is not one that can be read; these can: {', '.join(BITS)}")
    low, high = -(2 ** (bits - 1)), 2 ** (bits - 1) - 1
    return Calibration(low, high, (low - line.baseline) / line.gain, (high - line.baseline) / line.gain, missing=low)


def frames_held(hea: Path, header: Header, lines: tuple[SignalLine, ...]) -> int:
    """Frames in a file, the header's number checked against its size."""
    path = hea.parent / lines[0].file
    if not path.is_file():
        raise FileError(f"{hea.name} names {path.name}, which is not beside it")
    if len({(line.fmt, line.offset) for line in lines}) > 1:
        raise FileError(f"{hea.name}: the signals of {path.name} differ in format or offset")
    size = path.stat().st_size - lines[0].offset
    if size < 0:
        raise FileError(f"{path.name} is truncated: its signals begin at byte {lines[0].offset}, it has {size + lines[0].offset}")
    per_sample = _BYTES.get(lines[0].fmt)
    declared = header.n_frames
    if per_sample is None:
        if declared is None:
            raise FileError(f"{hea.name} does not say how many samples {path.name} holds")
        if declared > size * _MOST_FRAMES_A_BYTE:
            raise FileError(f"{path.name} is truncated: {hea.name} declares {declared} frames, no {size} bytes hold them")
        return declared
    held = int(size / (per_sample * sum(line.samples_per_frame for line in lines)) + 1e-9)
    if declared is None:
        return held
    if held < declared:
        raise FileError(f"{path.name} is truncated: {hea.name} declares {declared} frames, it holds {held}")
    return declared


def source_of(hea: Path, lines: tuple[SignalLine, ...], place: int, number: int, n_frames: int) -> Callable[[int, int], NDArray]:
    """Source of a signal's stored integers by sample number.

    Parameters
    ----------
    hea : Path
        The record's header.
    lines : tuple of SignalLine
        The signals that share the file: a frame holds the samples of each in turn.
    place, number : int
        The signal's place among them, and in the record.
    n_frames : int
        Frames in the file.
    """
    fmt = lines[place].fmt
    if fmt == "8":
        return _summed(_memory_mapped(hea, lines, place, n_frames), int(lines[place].text.get("initial", 0)))
    return _memory_mapped(hea, lines, place, n_frames) if fmt in _PLAIN else _through_wfdb(hea, lines[place], number)


def _summed(steps: Callable[[int, int], NDArray], initial: int) -> Callable[[int, int], NDArray]:
    """Source of a signal stored as its first differences (format 8): every part needs all before it, which wfdb leaves out."""

    def source(start: int, stop: int) -> NDArray:
        places = range(0, start, _BLOCK)
        before = sum(int(steps(at, min(at + _BLOCK, start)).sum(dtype=np.int64)) for at in places)
        return (initial + before + np.cumsum(steps(start, stop), dtype=np.int64)).astype(np.int32)

    return source


def _memory_mapped(hea: Path, lines: tuple[SignalLine, ...], place: int, n_frames: int) -> Callable[[int, int], NDArray]:
    """Source of the stored numbers of a signal, in a file in which every sample is a number of whole bytes."""
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
