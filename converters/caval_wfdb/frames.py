"""Samples of a WFDB record as frames of bytes."""

from __future__ import annotations

from typing import BinaryIO

import numpy as np
from numpy.typing import NDArray

from caval.recording import Calibration, Channel, Recording

__all__ = ["BITS", "write_samples"]

BITS = {"212": 12, "16": 16, "24": 24, "32": 32}
"""Bits of each signal format that is written."""
_BLOCK_SAMPLES = 1 << 20


def write_samples(
    stream: BinaryIO, recording: Recording, calibrations: list[Calibration], widths: list[int], n_frames: int, fmt: str
) -> tuple[list[int], list[int], list[int]]:
    """Write all frames; for each channel the sum of its samples, the first, and how many valid ones stand on the missing code."""
    missing = -(2 ** (BITS[fmt] - 1))
    holes = [c.holes() for c in recording.channels]
    sums, firsts, rails = ([0] * len(widths) for _ in range(3))
    step = 2 * max(1, _BLOCK_SAMPLES // (2 * sum(widths)))  # even: format 212 packs samples in pairs
    for first in range(0, n_frames, step):
        last = min(first + step, n_frames)
        columns = []
        for i, (channel, calibration, width) in enumerate(zip(recording.channels, calibrations, widths, strict=True)):
            values = _integers(channel, calibration, first * width, last * width, missing)
            blank = np.zeros(len(values), dtype=bool)
            blank[max(0, channel.n_samples - first * width) :] = True
            here = holes[i][(holes[i][:, 1] > first * width) & (holes[i][:, 0] < last * width)]
            for start, stop in here:
                blank[max(0, start - first * width) : stop - first * width] = True
            rails[i] += int(((values == missing) & ~blank).sum())
            values[blank] = missing
            sums[i] += int(values.sum(dtype=np.int64))
            if first == 0:
                firsts[i] = int(values[0]) if len(values) else 0
            columns.append(values.reshape(last - first, width))
        stream.write(_packed(np.concatenate(columns, axis=1).reshape(-1), fmt))
    return sums, firsts, rails


def _integers(channel: Channel, calibration: Calibration, start: int, stop: int, missing: int) -> NDArray[np.int64]:
    n = channel.n_samples
    stored = channel.digital(min(start, n), min(stop, n))
    if channel.calibration is None:
        finite = np.isfinite(stored)
        stored = np.where(finite, calibration.to_digital(np.where(finite, stored, 0.0)), missing)
    values = np.full(stop - start, missing, dtype=np.int64)
    values[: len(stored)] = stored
    return values


def _packed(values: NDArray[np.int64], fmt: str) -> bytes:
    if fmt == "16":
        return values.astype("<i2").tobytes()
    if fmt == "32":
        return values.astype("<i4").tobytes()
    if fmt == "24":
        return np.ascontiguousarray(values.astype("<i4").view(np.uint8).reshape(-1, 4)[:, :3]).tobytes()
    if len(values) % 2:
        values = np.append(values, 0)
    low, high = values[0::2] & 0xFFF, values[1::2] & 0xFFF
    triple = np.stack([low & 0xFF, (low >> 8) | ((high >> 8) << 4), high & 0xFF], axis=1)
    return triple.astype(np.uint8).tobytes()
