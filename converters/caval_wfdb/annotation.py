"""WFDB annotation files: columns to bytes and back.

The MIT format (WFDB Applications Guide, annot(5)): 16-bit words, type in the upper 6 bits, ticks since the annotation before in the lower
10; types above 58 carry what does not fit: 59 a longer interval, 60 num, 61 subtype, 62 chan, 63 text. Two zero bytes end the file.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from caval.errors import FileError, InputError
from caval.track import Track
from caval.vocabulary import NOTE_CODE

__all__ = ["SYMBOLS", "TRACK_ENDING", "decode", "encode", "read_annotations", "track_bytes"]

TRACK_ENDING = "cvp"
"""Ending of the annotation file that holds our track."""
BEGIN, END = " begin", " end"

_ORDER = '_NLRaVFJASEj/Q~_|_sT*D"=pB^t+u?![]en@xf()r'
SYMBOLS = {code: symbol for code, symbol in enumerate(_ORDER) if symbol != "_"}
"""Symbol of each annotation code that has one."""
_CODES = {symbol: code for code, symbol in SYMBOLS.items() if symbol} | {f"code{c}": c for c in range(1, 50) if not SYMBOLS.get(c)}
BEAT_SYMBOLS = frozenset("NLRBAaJSVrFejnE/fQ?")
"""Symbols of the codes that stand for a beat."""
_SKIP, _NUM, _SUB, _CHN, _AUX = 59, 60, 61, 62, 63
_RESOLUTION = re.compile(r"## time resolution: ([0-9.]+(?:[eE][+-]?[0-9]+)?)")
_MOST_TEXT = 255


def decode(raw: bytes, name: str) -> tuple[dict[str, NDArray], float | None]:
    """Columns ``tick, code, subtype, chan, num, text`` of an annotation file, and the ticks a second it states (None: it states none).

    Raises
    ------
    FileError
        The file does not end as an annotation file does: it is truncated, or something else.
    """
    if len(raw) % 2 or len(raw) < 2:
        raise FileError(f"{name} is no annotation file, or truncated: {len(raw)} bytes")
    words = np.frombuffer(raw, dtype="<u2").tolist()
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
    columns = {
        "tick": np.array(ticks, dtype=np.int64), "code": np.array(codes, dtype=np.int64), "subtype": np.array(subtypes, dtype=np.int64),
        "chan": np.array(chans, dtype=np.int64), "num": np.array(nums, dtype=np.int64), "text": np.array(texts, dtype=object),
    }
    return _without_definitions(columns)


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
        Ticks out of order, a text above 255 bytes, a chan, num or subtype out of range.
    """
    tick, code = columns["tick"].astype(np.int64), columns["code"].astype(np.int64)
    if (np.diff(tick) < 0).any():
        raise InputError("WFDB annotations need sample numbers in order")
    out = bytearray(_head(ticks_per_s))
    before = chan_before = num_before = 0
    fields = [columns[name].tolist() for name in ("subtype", "chan", "num", "text")]
    for t, c, sub, chan, num, text in zip(tick.tolist(), code.tolist(), *fields, strict=True):
        step = t - before
        before = t
        if not 0 <= step <= 0x3FF:
            if not -(2**31) <= step < 2**31:
                raise InputError(f"WFDB annotations lie at most {2**31 - 1} ticks apart; the one at tick {t} lies farther")
            step &= 0xFFFFFFFF
            out += _word(_SKIP, 0) + (step >> 16).to_bytes(2, "little") + (step & 0xFFFF).to_bytes(2, "little")
            step = 0
        out += _word(c, step)
        if sub:
            out += _word(_SUB, _byte(sub, -128, 127, "subtype"))
        if chan != chan_before:
            out += _word(_CHN, _byte(chan, 0, 255, "chan"))
            chan_before = chan
        if num != num_before:
            out += _word(_NUM, _byte(num, -128, 127, "num"))
            num_before = num
        if text:
            out += _text(text)
    return bytes(out) + b"\0\0"


def _word(code: int, value: int) -> bytes:
    return ((code << 10) | value).to_bytes(2, "little")


def _byte(value: int, low: int, high: int, what: str) -> int:
    if not low <= value <= high:
        raise InputError(f"WFDB annotations hold a {what} of {low} to {high}, not {value}")
    return value & 0xFF


def _text(text: str) -> bytes:
    """A text as Latin-1, which other readers expect; as UTF-8 where that cannot hold it, or would be read back as something else."""
    raw = text.encode("latin-1", "replace")
    if _decoded(raw) != text:
        raw = text.encode("utf-8")
    if len(raw) > _MOST_TEXT:
        raise InputError(f"annotation {text[:30]!r}… has {len(raw)} bytes; WFDB holds {_MOST_TEXT}")
    return _word(_AUX, len(raw)) + raw + b"\0" * (len(raw) % 2)


def _head(ticks_per_s: float) -> bytes:
    """The note that states the ticks a second, and the step back that other readers expect after it."""
    note = f"## time resolution: {ticks_per_s:.12g}"
    return _word(NOTE_CODE, 0) + _text(note) + _word(_SKIP, 0) + b"\xff\xff\xff\xff" + b"\x01\x00"


def read_annotations(path: Path, *, default_rate: float | None = None) -> Track:
    """An annotation file as a Track: notes give their text, other codes their symbol, and their text after it.

    Pairs of notes that end in `` begin`` and `` end`` are joined to spans. `extra` has ``symbol``, ``subtype`` and ``num``; `channel` is
    the file's ``chan`` for our own texts, and -1 otherwise, since most files leave it 0 for want of a channel.

    Parameters
    ----------
    default_rate : float, optional
        Ticks a second where the file states none; else the rate of the record's header.

    Raises
    ------
    FileError
        Not an annotation file, truncated, or a file that states no ticks a second beside no header.
    """
    path = Path(path)
    columns, rate = decode(path.read_bytes(), path.name)
    rate = rate or default_rate or _rate_of_header(path)
    symbols = np.array([SYMBOLS.get(int(c)) or f"code{c}" for c in columns["code"]], dtype=object)
    noted = np.array([f"{s} {t}".rstrip() for s, t in zip(symbols, columns["text"], strict=True)], dtype=object)
    text = np.where(columns["code"] == NOTE_CODE, columns["text"], noted)
    onset = columns["tick"] / rate
    extra = {"symbol": symbols, "subtype": columns["subtype"], "num": columns["num"]}
    ours = np.array([t.startswith(("CVP/", "BAD_")) for t in text], dtype=bool)
    channel = np.where(ours, columns["chan"], -1) if len(text) else columns["chan"]
    return _joined(Track.build(onset, text, channel=channel, extra=extra))


def _rate_of_header(path: Path) -> float:
    from caval_wfdb.header import read_header

    header = path.with_suffix(".hea")
    if not header.is_file():
        raise FileError(f"{path.name} states no ticks a second and has no {header.name} beside it that does")
    return read_header(header).frame_rate


def _joined(track: Track) -> Track:
    """Begin and end notes as spans, the first begun the first ended; one without its partner stays as it is."""
    text = track.text
    open_at: dict[tuple[str, int], list[int]] = {}
    duration = track.duration_s.copy()
    words, keep = text.copy(), np.ones(len(track), dtype=bool)
    for i, word in enumerate(text):
        if word.endswith(BEGIN):
            open_at.setdefault((word.removesuffix(BEGIN), int(track.channel[i])), []).append(i)
        elif word.endswith(END):
            begun = open_at.get((word.removesuffix(END), int(track.channel[i])))
            if begun:
                begin = begun.pop(0)
                duration[begin] = track.onset_s[i] - track.onset_s[begin]
                words[begin], keep[i] = word.removesuffix(END), False
    if keep.all():
        return track
    extra = {name: column[keep] for name, column in track.extra.items()}
    return Track.build(track.onset_s[keep], words[keep], duration_s=duration[keep], channel=track.channel[keep], extra=extra)


def track_bytes(track: Track, ticks_per_s: float, *, default_channel: int = 0) -> bytes:
    """A Track as an annotation file: beats and other codes by their symbol, all else as notes, spans as two of them.

    A beat's letter that stands alone as a text is a beat. A note at tick 0 is written at tick 1: wfdb's reader takes notes at 0 for
    words about the file and drops them.
    """
    if not (np.isfinite(track.onset_s).all() and np.isfinite(track.duration_s).all()):
        raise InputError("an annotation has no finite time; WFDB needs a sample number for each")
    symbols = track.extra.get("symbol")
    text = track.text
    tick: list[int] = []
    code: list[int] = []
    words: list[str] = []
    rows: list[int] = []
    for i in range(len(track)):
        word, at = str(text[i]), round(track.onset_s[i] * ticks_per_s)
        symbol = str(symbols[i]) if symbols is not None else ""
        if not symbol and (word in BEAT_SYMBOLS or word.startswith("+ (")):
            symbol = word[0]
        known = _CODES.get(symbol, NOTE_CODE) if track.duration_s[i] == 0 else NOTE_CODE
        parts: Sequence[tuple[int, str]] = [(at, word)]
        if known != NOTE_CODE:
            parts = [(at, word.removeprefix(symbol).lstrip())]
        elif track.duration_s[i] > 0:
            parts = [(at, word + BEGIN), (round((track.onset_s[i] + track.duration_s[i]) * ticks_per_s), word + END)]
        for place, word in parts:
            tick.append(1 if place == 0 and known == NOTE_CODE else place)
            code.append(known)
            words.append(word)
            rows.append(i)
    order = np.argsort(np.array(tick, dtype=np.int64), kind="stable")
    row = np.array(rows, dtype=np.int64)[order]
    channel = np.where(track.channel[row] >= 0, track.channel[row], default_channel)
    zeros = np.zeros(len(row), dtype=np.int64)
    columns = {
        "tick": np.array(tick, dtype=np.int64)[order],
        "code": np.array(code, dtype=np.int64)[order],
        "subtype": _numbers(track, "subtype", row, zeros),
        "chan": channel,
        "num": _numbers(track, "num", row, zeros),
        "text": np.array(words, dtype=object)[order],
    }
    return encode(columns, ticks_per_s)


def _numbers(track: Track, name: str, row: NDArray[np.int64], zeros: NDArray[np.int64]) -> NDArray:
    return track.extra[name][row].astype(np.int64) if name in track.extra else zeros
