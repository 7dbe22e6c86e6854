"""WFDB annotation files: bytes to columns and back.

The MIT format (WFDB Applications Guide, annot(5)): 16-bit words, type in the upper 6 bits, ticks since the annotation before in the lower
10; types above 58 carry what does not fit: 59 a longer interval, 60 num, 61 subtype, 62 chan, 63 text. Two zero bytes end the file.
"""

from __future__ import annotations

import re

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval.errors import FileError, InputError
from caval.vocabulary import NOTE_CODE

__all__ = ["decode", "encode"]

_SKIP, _NUM, _SUB, _CHN, _AUX = 59, 60, 61, 62, 63
_RESOLUTION = re.compile(r"## time resolution: ([0-9]+(?:\.[0-9]*)?(?:[eE][+-]?[0-9]{1,2})?)(?:\s|$)")
_MOST_TEXT = 255
_LIMITS = {"subtype": (-128, 127), "chan": (0, 255), "num": (-128, 127)}


def decode(raw: bytes, name: str) -> tuple[dict[str, NDArray], float | None]:
    """Columns ``tick, code, subtype, chan, num, text`` of an annotation file, and the ticks a second it states (None: it states none).

    Raises
    ------
    FileError
        The file does not end as an annotation file does: it is truncated, or something else.
    """
    if len(raw) % 2 or len(raw) < 2:
        raise FileError(f"{name} is no annotation file, or truncated: {len(raw)} bytes")
    rows = _parsed(raw, np.frombuffer(raw, dtype="<u2").tolist(), name)
    return _without_definitions({key: np.array(rows[key], dtype=object if key == "text" else np.int64) for key in rows})


def _parsed(raw: bytes, words: list[int], name: str) -> dict[str, list]:
    """The columns of `decode` as lists, the notes about the file itself among them."""
    ticks: list[int] = []
    codes: list[int] = []
    subtypes: list[int] = []
    chans: list[int] = []
    nums: list[int] = []
    texts: list[str] = []
    tick = at = chan = num = 0
    n = len(words)
    while True:
        if at >= n:
            raise FileError(f"{name} is truncated: it ends after {len(ticks)} annotations without the end mark")
        word = words[at]
        at += 1
        if word == 0:
            if any(words[at:]):
                raise FileError(f"{name} is no annotation file: {2 * (n - at)} bytes follow the end mark")
            break
        code, value = word >> 10, word & 0x3FF
        if code == _SKIP:
            if at + 2 > n:
                raise FileError(f"{name} is truncated within an interval, after {len(ticks)} annotations")
            jump = (words[at] << 16) | words[at + 1]
            tick += jump - (1 << 32) if jump >= 1 << 31 else jump
            at += 2
        elif code == _AUX:
            length = (value + 1) // 2
            if at + length > n or not ticks:
                raise FileError(f"{name} is truncated within a text, after {len(ticks)} annotations")
            texts[-1] = _decoded(raw[2 * at : 2 * at + value])
            at += length
        elif code in (_NUM, _SUB, _CHN):
            if not ticks:
                raise FileError(f"{name} is no annotation file: it begins with a field of no annotation")
            signed = value - 256 if 128 <= value < 256 else value
            if code == _NUM:
                nums[-1] = num = signed
            elif code == _SUB:
                subtypes[-1] = signed
            else:
                chans[-1] = chan = value
        elif code > _AUX or 50 <= code < _SKIP:
            raise FileError(f"{name} is no annotation file: code {code}")
        else:
            tick += value
            ticks.append(tick)
            codes.append(code)
            subtypes.append(0)
            chans.append(chan)
            nums.append(num)
            texts.append("")
    return {"tick": ticks, "code": codes, "subtype": subtypes, "chan": chans, "num": nums, "text": texts}


def _decoded(raw: bytes) -> str:
    """Texts are bytes of no stated encoding: what reads as UTF-8 is that, all else Latin-1."""
    try:
        return raw.rstrip(b"\0").decode("utf-8")
    except UnicodeDecodeError:
        return raw.rstrip(b"\0").decode("latin-1")


def _without_definitions(columns: dict[str, NDArray]) -> tuple[dict[str, NDArray], float | None]:
    """Less the notes that speak of the file itself, and the empty annotations that only move time."""
    rate = None
    keep = columns["code"] > 0
    for i, (tick, code, text) in enumerate(zip(columns["tick"], columns["code"], columns["text"], strict=True)):
        if tick > 0:
            break
        if code == NOTE_CODE and text.startswith("## "):
            keep[i] = False
            stated = _RESOLUTION.match(text)
            rate = float(stated[1]) if stated else rate
    return {name: column[keep] for name, column in columns.items()}, rate


def encode(columns: dict[str, NDArray], ticks_per_s: float) -> bytes:
    """An annotation file that states its ticks a second; columns as `decode` gives them, ticks ascending.

    Raises
    ------
    InputError
        Ticks out of order, a text above 255 bytes or beyond Latin-1, a chan, num or subtype out of range.
    """
    tick = columns["tick"].astype(np.int64)
    step = np.diff(tick, prepend=0)
    if (step[1:] < 0).any():
        raise InputError("WFDB annotations need sample numbers in order")
    if (np.abs(step) >= 2**31).any():
        raise InputError(f"WFDB annotations lie at most {2**31 - 1} ticks apart; two of these lie farther")
    numbers = {name: _checked(columns[name], *limits, name) for name, limits in _LIMITS.items()}
    text_code, texts = pd.factorize(np.asarray(columns["text"], dtype=object))
    text_words = [_text_words(str(text)) for text in texts]
    skips = (step < 0) | (step > 0x3FF)
    fields = [(_SUB, numbers["subtype"], numbers["subtype"] != 0)]
    fields += [(kind, numbers[name], np.diff(numbers[name], prepend=0) != 0) for kind, name in ((_CHN, "chan"), (_NUM, "num"))]
    text_length = np.array([len(words) for words in text_words] or [0])[text_code]
    length = 3 * skips + 1 + sum(present.astype(np.int64) for _, _, present in fields) + text_length
    out = np.zeros(int(length.sum()), dtype="<u2")
    at = np.cumsum(length) - length
    out[at[skips]] = _SKIP << 10
    out[at[skips] + 1] = (step[skips] >> 16) & 0xFFFF
    out[at[skips] + 2] = step[skips] & 0xFFFF
    at += 3 * skips
    out[at] = (columns["code"].astype(np.int64) << 10) | np.where(skips, 0, step)
    at += 1
    for kind, values, present in fields:
        out[at[present]] = (kind << 10) | (values[present] & 0xFF)
        at += present
    by_text = np.split(np.argsort(text_code, kind="stable"), np.cumsum(np.bincount(text_code, minlength=len(texts)))[:-1])
    for rows, words in zip(by_text, text_words, strict=False):
        out[at[rows][:, None] + np.arange(len(words))] = words
    return _head(ticks_per_s) + out.tobytes() + b"\0\0"


def _checked(values: NDArray, low: int, high: int, what: str) -> NDArray[np.int64]:
    values = values.astype(np.int64)
    wrong = values[(values < low) | (values > high)]
    if len(wrong):
        raise InputError(f"WFDB annotations hold a {what} of {low} to {high}, not {wrong[0]}")
    return values


def _text_words(text: str) -> NDArray[np.uint16]:
    """A text field as 16-bit words, none for no text: Latin-1, which is what other readers take it for."""
    if not text:
        return np.empty(0, dtype="<u2")
    raw = text.encode("latin-1", "replace")
    if _decoded(raw) != text:
        raise InputError(f"annotation {text[:60]!r}: readers of WFDB files take texts for Latin-1; reword it, or keep the record in EDF+")
    if len(raw) > _MOST_TEXT:
        raise InputError(f"annotation {text[:30]!r}… has {len(raw)} bytes; WFDB holds {_MOST_TEXT}")
    return np.frombuffer(((_AUX << 10) | len(raw)).to_bytes(2, "little") + raw + b"\0" * (len(raw) % 2), dtype="<u2")


def _head(ticks_per_s: float) -> bytes:
    """The note that states the ticks a second, and the step back that other readers expect after it."""
    note = f"## time resolution: {ticks_per_s:.12g}"
    start = np.concatenate([[NOTE_CODE << 10], _text_words(note), [_SKIP << 10, 0xFFFF, 0xFFFF, 1]])
    return start.astype("<u2").tobytes()
