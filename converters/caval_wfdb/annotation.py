"""WFDB annotation files as tracks."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from caval.errors import FileError, InputError
from caval.track import Track
from caval.vocabulary import NOTE_CODE, RHYTHM_CODE, RHYTHMS, parse_text
from caval_wfdb.codec import decode, encode

__all__ = ["SYMBOLS", "TRACK_ENDING", "read_annotations", "track_bytes"]

TRACK_ENDING = "cvp"
"""Ending of the annotation file that holds our track."""
BEGIN, END = " begin", " end"

_ORDER = '_NLRaVFJASEj/Q~_|_sT*D"=pB^t+u?![]en@xf()r'
SYMBOLS = {code: symbol for code, symbol in enumerate(_ORDER) if symbol != "_"}
"""Symbol of each annotation code that has one."""
_CODES = {symbol: code for code, symbol in SYMBOLS.items() if symbol} | {f"code{c}": c for c in range(1, 50) if not SYMBOLS.get(c)}
_FIELDS = ("subtype", "chan", "num")
BEAT_SYMBOLS = frozenset("NLRBAaJSVrFejnE/fQ?")
"""Symbols of the codes that stand for a beat."""


def read_annotations(path: Path, *, default_rate: float | None = None) -> Track:
    """An annotation file as a Track: notes give their text, other codes their symbol, and their text after it.

    Pairs of notes that end in `` begin`` and `` end`` are joined to spans. `extra` has ``symbol``, ``subtype``, ``chan`` and ``num``;
    `channel` is ``chan`` for our own texts, and -1 otherwise, since most files leave it 0 for want of a channel.

    Parameters
    ----------
    default_rate : float, optional
        Ticks a second where the file states none; else the rate of the record's header.

    Raises
    ------
    FileError
        No such file, not an annotation file, truncated, or a file that states no ticks a second beside no header.
    """
    path = Path(path)
    if not path.is_file():
        raise FileError(f"no such file: {path}")
    columns, rate = decode(path.read_bytes(), path.name)
    rate = rate or default_rate or _rate_of_header(path)
    symbols = np.array([SYMBOLS.get(int(c)) or f"code{c}" for c in columns["code"]], dtype=object)
    noted = np.array([f"{s} {t}".rstrip() for s, t in zip(symbols, columns["text"], strict=True)], dtype=object)
    text = np.where(columns["code"] == NOTE_CODE, columns["text"], noted)
    onset = columns["tick"] / rate
    extra = {"symbol": symbols, **{name: columns[name] for name in _FIELDS}}
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


def track_bytes(track: Track, ticks_per_s: float) -> bytes:
    """A Track as an annotation file: beats and other codes by their symbol, all else as notes, spans as two of them.

    A beat's letter that stands alone as a text is a beat. A note at tick 0 is written at tick 1: wfdb's reader takes notes at 0 for
    words about the file and drops them.
    """
    if not (np.isfinite(track.onset_s).all() and np.isfinite(track.duration_s).all()):
        raise InputError("an annotation has no finite time; WFDB needs a sample number for each")
    is_rhythm = np.array([_rhythm_string(text) != "" for text in track.texts] + [False])[track.code]
    is_span = (track.duration_s > 0) & ~is_rhythm  # a rhythm lasts until the next
    symbol = track.extra["symbol"].astype(str) if "symbol" in track.extra else np.repeat("", len(track))
    kind, kinds = pd.factorize(pd.MultiIndex.from_arrays([symbol, track.code, is_span]))
    forms = [_form(sign, track.texts[code], is_span=spans) for sign, code, spans in kinds]
    codes = np.array([code for code, _, _ in forms], dtype=np.int64)
    words = np.array([word for _, *pair in forms for word in pair], dtype=object)  # as it begins, as it ends
    row = np.repeat(np.arange(len(track)), 1 + is_span)
    is_end = np.diff(row, prepend=-1) == 0
    tick = np.rint((track.onset_s[row] + np.where(is_end, track.duration_s[row], 0.0)) * ticks_per_s).astype(np.int64)
    code = codes[kind[row]]
    tick[(tick == 0) & (code == NOTE_CODE)] = 1
    order = np.argsort(tick, kind="stable")
    row = row[order]
    fields = {name: track.extra[name][row] if name in track.extra else np.zeros(len(row), dtype=np.int64) for name in _FIELDS}
    columns = {
        "tick": tick[order],
        "code": code[order],
        **fields,
        "chan": np.where(track.channel[row] >= 0, track.channel[row], fields["chan"]),
        "text": words[2 * kind[row] + is_end[order]],
    }
    return encode(columns, ticks_per_s)


def _rhythm_string(text: str) -> str:
    """WFDB rhythm string of one of our rhythm texts, empty for others."""
    said = parse_text(text)
    return RHYTHMS[said[2]].wfdb if said is not None and said[0] == "rhythm" else ""


def _form(symbol: str, text: str, *, is_span: bool) -> tuple[int, str, str]:
    """Code of an annotation, and its text where it begins and where it ends."""
    if is_span:
        return NOTE_CODE, text + BEGIN, text + END
    if not symbol and (text in BEAT_SYMBOLS or text.startswith("+ (")):
        symbol = text[0]
    if _rhythm_string(text):
        return RHYTHM_CODE, _rhythm_string(text), ""
    code = _CODES.get(symbol, NOTE_CODE)
    word = text if code == NOTE_CODE else "" if text == symbol else text.removeprefix(f"{symbol} ")
    return code, word, word
