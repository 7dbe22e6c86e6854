"""Time-stamped annotation lists of EDF+: bytes to columns and back.

An annotation is ``+onset [0x15 duration] 0x14 text 0x14 … 0x00``; the first of each data record has no text and keeps the time of the
record (EDF+ specification, 2.2.2 to 2.2.4).
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from caval.errors import FileError, InputError
from caval_edf.header import plain

__all__ = ["FILL", "GAP", "decode", "encode", "hole_texts", "seconds_text", "spread"]

GAP, FILL = "missing", "fill"
"""Not the kinds of `caval.vocabulary.SPANS`: what a stage says of a channel is no statement about its samples."""


def hole_texts(labels: Sequence[str], kind: str) -> list[str]:
    """Texts that note samples of each channel without a value, a gap or the fill of the last data record.

    Channels of one label are told apart by number.

    >>> hole_texts(["CVP", "P", "P"], GAP)
    ['BAD_CVP/missing', 'BAD_P/missing', 'BAD_P#2/missing']
    """
    seen: Counter[str] = Counter()
    texts = []
    for label in labels:
        name = plain(label).upper()
        seen[name] += 1
        texts.append(f"BAD_{name}{f'#{seen[name]}' if seen[name] > 1 else ''}/{kind}")
    return texts


def decode(records: Sequence[bytes], name: str) -> tuple[NDArray[np.float64], list[float], list[float], list[str]]:
    """What annotation signals hold, a bytes object a data record.

    Returns
    -------
    starts_s : float64 array, shape (n records,)
        Time of each data record after the file's start time, NaN where none is kept.
    onset_s, duration_s, text : lists
        Annotations in file order; a duration that is absent is 0.
    """
    starts = np.full(len(records), np.nan)
    onsets: list[float] = []
    durations: list[float] = []
    texts: list[str] = []
    for number, raw in enumerate(records):
        for tal in raw.split(b"\x14\x00"):
            body = tal.lstrip(b"\x00")
            if not body:
                continue
            stamp, *words = body.split(b"\x14")
            onset, _, duration = stamp.partition(b"\x15")
            at, lasts = _seconds(onset, name, number), _seconds(duration or b"0", name, number)
            if np.isnan(starts[number]) and not any(words[:1]):
                starts[number] = at
                words = words[1:]
            for word in words:
                onsets.append(at)
                durations.append(lasts)
                texts.append(_decoded(word))
    return starts, onsets, durations, texts


def _seconds(text: bytes, name: str, number: int) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise FileError(f"{name}: data record {number} holds an annotation at {text[:20]!r}, which is no time")
    return value


def _decoded(word: bytes) -> str:
    try:
        return word.decode("utf-8")
    except UnicodeDecodeError:
        return word.decode("latin-1")


def seconds_text(seconds: float) -> str:
    """Seconds with as many decimals as they need, at most nine, never an exponent."""
    text = f"{seconds:.9f}".rstrip("0").rstrip(".")
    return "0" if text in ("-0", "") else text


def encode(onset_s: float, duration_s: float, text: str) -> bytes:
    """One annotation; InputError for a time that is no number or a text that holds the format's own separators."""
    if not (math.isfinite(onset_s) and math.isfinite(duration_s)):
        raise InputError(f"annotation {text!r} at {onset_s} s, lasting {duration_s} s: EDF+ needs finite times")
    if any(mark in text for mark in "\x00\x14\x15"):
        raise InputError(f"annotation {text!r} holds a control character that EDF+ uses itself (0, 20 or 21)")
    sign = "" if onset_s < 0 and seconds_text(onset_s) != "0" else "+"
    lasts = f"\x15{seconds_text(duration_s)}" if duration_s > 0 else ""
    return f"{sign}{seconds_text(onset_s)}{lasts}\x14{text}\x14\x00".encode()


def spread(stamps: Sequence[bytes], tals: Sequence[bytes], homes: NDArray[np.int64]) -> tuple[list[bytes], int]:
    """Annotations laid into data records, and the bytes a record then needs.

    Each goes into its own record (`homes`) or the next with room. Where the records that follow are too few, crowded ones go into
    earlier records, which EDF+ allows: all records have one size, and the size comes from the mean and not from the crowd.

    Parameters
    ----------
    stamps : sequence of bytes
        The time-keeping annotation of each record.
    tals : sequence of bytes
        Annotations in time order.
    homes : int array
        The record in which each would best stand, ascending.
    """
    sizes = [len(t) for t in tals]
    stamp = max(len(s) for s in stamps)
    capacity = max(sizes, default=0) + -(-sum(sizes) * 11 // (10 * len(stamps)))
    ready = np.minimum(homes, _latest(sizes, capacity, len(stamps))).tolist()
    laid, waiting = [], 0
    for number, start in enumerate(stamps):
        first, used = waiting, 0
        while waiting < len(tals) and ready[waiting] <= number and used + sizes[waiting] <= capacity:
            used += sizes[waiting]
            waiting += 1
        laid.append(start + b"".join(tals[first:waiting]))
    return laid, stamp + capacity


def _latest(sizes: Sequence[int], capacity: int, n_records: int) -> NDArray[np.int64]:
    """The last record in which each annotation may stand so that all after it find room, the records filled from the end."""
    latest, number, used = np.empty(len(sizes), dtype=np.int64), n_records - 1, 0
    for i in range(len(sizes) - 1, -1, -1):
        if used + sizes[i] > capacity:
            number, used = number - 1, 0
        used += sizes[i]
        latest[i] = number
    return latest
