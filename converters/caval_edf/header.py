"""The header of EDF and BDF files as fields of fixed width: text to values and back.

Kemp et al., Electroencephalogr Clin Neurophysiol 1992;82:391 (EDF); Kemp & Olivan, Clin Neurophysiol 2003;114:1755 (EDF+).
"""

from __future__ import annotations

import math
import os
import unicodedata
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

from caval.errors import FileError, InputError

__all__ = ["MONTHS", "Header", "SignalHeader", "ascii_field", "free_field", "number_field", "plain", "read_header"]

_MAIN = (
    ("version", 8), ("patient", 80), ("recording", 80), ("startdate", 8), ("starttime", 8), ("header_bytes", 8), ("reserved", 44),
    ("n_records", 8), ("record_duration", 8), ("n_signals", 4),
)
_SIGNAL = (
    ("label", 16), ("transducer", 80), ("unit", 8), ("physical_min", 8), ("physical_max", 8), ("digital_min", 8), ("digital_max", 8),
    ("prefilter", 80), ("n_samples", 8), ("reserved", 32),
)
_NO_DATE, _NO_TIME = "01.01.85", "00.00.00"
"""What stands for an unknown date beside ``Startdate X``, and for an unknown time."""
_MOST_SIGNALS = 4096
MONTHS = ["JAN", "FEB", "MAR", "APR", "MAY", "JUN", "JUL", "AUG", "SEP", "OCT", "NOV", "DEC"]
_PLAIN = str.maketrans({"µ": "u", "μ": "u", "₂": "2", "°": "d", "–": "-", "−": "-"})


@dataclass(frozen=True)
class SignalHeader:
    """One signal's fields as text, and the numbers in them."""

    text: dict[str, str]
    physical_min: float
    physical_max: float
    digital_min: int
    digital_max: int
    n_samples: int

    @property
    def is_annotation(self) -> bool:
        return self.text["label"] in ("EDF Annotations", "BDF Annotations")


@dataclass(frozen=True)
class Header:
    """The header of a file. `sample_bytes` is 2 for EDF, 3 for BDF; `n_records` is what the file holds, whole; `left_bytes` come after."""

    text: dict[str, str]
    signals: tuple[SignalHeader, ...]
    sample_bytes: int
    header_bytes: int
    n_records: int
    record_duration_s: float
    left_bytes: int = 0

    @property
    def record_samples(self) -> int:
        return sum(s.n_samples for s in self.signals)

    @property
    def has_gaps(self) -> bool:
        return self.text["reserved"][:5] in ("EDF+D", "BDF+D")

    @property
    def start_time(self) -> datetime | None:
        """Date and time of the header, whole seconds; None where they cannot be read as such."""
        return _start_time(self.text)

    @property
    def is_undated(self) -> bool:
        """The header says that neither date nor time are known, the way our writer does."""
        is_blank = self.text["startdate"] == _NO_DATE and self.text["starttime"] == _NO_TIME
        return is_blank and self.text["recording"].split()[:2] == ["Startdate", "X"]


def read_header(path: Path) -> Header:
    """Read and check the header of an EDF or BDF file.

    Raises
    ------
    FileError
        Not such a file, a field that is no number, impossible values, or fewer or more data records than the header declares.
    """
    size = os.path.getsize(path)
    with open(path, "rb") as stream:
        main = stream.read(256)
        if len(main) < 256 or not (main[:8] == b"0       " or main[:8] == b"\xffBIOSEMI"):
            raise FileError(f"{path.name} is not an EDF or BDF file: it does not begin with the version field of either")
        text = _split(main, _MAIN)
        n_signals = _integer(path, "number of signals", text["n_signals"], 1, _MOST_SIGNALS)
        rest = stream.read(256 * n_signals)
    if len(rest) < 256 * n_signals:
        raise FileError(f"{path.name} is truncated: {size} bytes; the header of its {n_signals} signals alone has {256 * (n_signals + 1)}")
    signals = tuple(_signal(path, fields) for fields in _columns(rest, n_signals))
    sample_bytes = 3 if main[:1] == b"\xff" else 2
    header_bytes = _integer(path, "bytes in the header", text["header_bytes"], 256 * (n_signals + 1), 256 * (n_signals + 1))
    duration_s = _number(path, "duration of a data record", text["record_duration"])
    declared = _integer(path, "number of data records", text["n_records"], -1, 2**40)
    record_bytes = sample_bytes * sum(s.n_samples for s in signals)
    whole, left = divmod(size - header_bytes, record_bytes) if record_bytes else (0, 0)
    if duration_s < 0 or (duration_s == 0 and not all(s.is_annotation for s in signals)):
        raise FileError(f"{path.name}: a data record of {duration_s:g} s; it must be above 0")
    if declared == -1:
        declared = whole  # a recorder that never closed its file: what is whole counts
    elif declared != whole or left:
        verb = "is truncated" if whole < declared else "does not fit its header"
        expected = header_bytes + declared * record_bytes
        raise FileError(
            f"{path.name} {verb}: its {declared} data records make {expected} bytes, it has {size} ({max(whole, 0)} whole data records)"
        )
    return Header(text, signals, sample_bytes, header_bytes, declared, duration_s, left)


def _decoded(raw: bytes) -> str:
    """Header text is ASCII by the specification; strangers write UTF-8 or Latin-1."""
    try:
        return raw.decode("utf-8")
    except UnicodeDecodeError:
        return raw.decode("latin-1")


def _split(raw: bytes, layout: tuple[tuple[str, int], ...]) -> dict[str, str]:
    fields, at = {}, 0
    for name, width in layout:
        fields[name] = _decoded(raw[at : at + width]).rstrip(" \0")
        at += width
    return fields


def _columns(raw: bytes, n_signals: int) -> list[dict[str, str]]:
    """The signals' fields: the file has all labels, then all transducers, and so on."""
    fields: list[dict[str, str]] = [{} for _ in range(n_signals)]
    at = 0
    for name, width in _SIGNAL:
        for signal in fields:
            signal[name] = _decoded(raw[at : at + width]).strip(" \0")
            at += width
    return fields


def _signal(path: Path, text: dict[str, str]) -> SignalHeader:
    what = f"signal {text['label']!r}, "
    limits = [_number(path, what + name, text[name]) for name in ("physical_min", "physical_max")]
    digital = [_integer(path, what + name, text[name], -(2**23), 2**23 - 1) for name in ("digital_min", "digital_max")]
    n_samples = _integer(path, what + "samples a data record", text["n_samples"], 0, 2**31)
    if digital[0] >= digital[1] or limits[0] == limits[1]:
        raise FileError(f"{path.name}: {what}limits {limits[0]:g} to {limits[1]:g} for {digital[0]} to {digital[1]} give no calibration")
    return SignalHeader(text, limits[0], limits[1], digital[0], digital[1], n_samples)


def _number(path: Path, what: str, text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise FileError(f"{path.name}: {what} is {text!r}; a number is needed")
    return value


def _integer(path: Path, what: str, text: str, low: int, high: int) -> int:
    try:
        value = int(text)
    except ValueError:
        raise FileError(f"{path.name}: {what} is {text!r}; a whole number is needed") from None
    if not low <= value <= high:
        raise FileError(f"{path.name}: {what} is {value}; allowed: {low if low == high else f'{low} to {high}'}")
    return value


def _start_time(text: dict[str, str]) -> datetime | None:
    date, time = text["startdate"].replace("-", ".").replace("/", "."), text["starttime"].replace(":", ".")
    try:
        hour, minute, second = (int(part) for part in time.split("."))
        words = text["recording"].split()
        if words[:1] == ["Startdate"] and len(words) > 1 and words[1] != "X":
            long_day, month_name, long_year = words[1].split("-")
            day, month, year = int(long_day), MONTHS.index(month_name.upper()) + 1, int(long_year)
        else:
            day, month, year = (int(part) for part in date.split("."))
            year += 1900 if year >= 85 else 2000  # the clipping date of EDF
        return datetime(year, month, day, hour, minute, second)
    except (ValueError, OverflowError):
        return None


def plain(value: str) -> str:
    """The spelling that stands for a label or unit in EDF: ``µV`` becomes ``uV``, ``cmH₂O`` becomes ``cmH2O``."""
    return value.translate(_PLAIN)


def free_field(value: str, width: int) -> bytes:
    """A text field without bearing on the signals (patient, transducer): letters without their accents, cut to fit, padded."""
    bare = "".join(c for c in unicodedata.normalize("NFKD", plain(value)) if not unicodedata.combining(c))
    shown = "".join(c if c.isprintable() else " " for c in bare)
    return shown.encode("ascii", "replace")[:width].ljust(width)


def ascii_field(value: str, width: int, what: str) -> bytes:
    """A text field: plain ASCII (µ becomes u), padded.

    Raises
    ------
    InputError
        Too long, or characters that EDF does not hold.
    """
    text = plain(value)
    if len(text) > width or not text.isascii() or not text.isprintable():
        raise InputError(f"{what} {value!r}: EDF holds {width} printable ASCII characters there; rename it first")
    return text.encode("ascii").ljust(width)


def number_field(value: float, what: str) -> bytes:
    """The shortest text of at most 8 characters that comes nearest to a number, padded."""
    texts = [repr(value), *(f"{value:.{digits}{kind}}" for kind in "gfe" for digits in range(9))]
    short = (text.removesuffix(".0").replace("e-0", "e-").replace("e+0", "e").replace("e+", "e") for text in texts)
    fitting = [text for text in short if len(text) <= 8]
    if not fitting:
        raise InputError(f"{what} {value!r} does not fit the 8 characters that EDF has for it")
    return min(fitting, key=lambda t: (abs(float(t) - value), "e" in t, len(t))).encode("ascii").ljust(8)
