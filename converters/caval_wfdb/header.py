"""WFDB header files: text to fields and back (WFDB Applications Guide, header(5))."""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path

from caval.errors import FileError
from caval.units import is_pressure_unit

__all__ = ["NO_UNIT", "Header", "Segment", "SignalLine", "is_annotation_ending", "read_header", "safe_name"]

NO_UNIT = "(none)"
"""What our own comments call an empty unit."""
_NO_ANNOTATION = frozenset(("hea", "dat", "edf", "bdf", "csv", "tsv", "json", "png", "pdf", "txt", "md", "html", "gz", "zip", "parquet"))
_DEFAULT_RATE_HZ = 250.0
_DEFAULT_GAIN = 200.0
_MOST_SIGNALS = 4096
_LINE = re.compile(
    r"(?P<file>\S+)\s+(?P<fmt>\d+)(?:x(?P<spf>\d+))?(?::(?P<skew>\d+))?(?:\+(?P<offset>\d+))?"
    r"(?:\s+(?P<gain>[-+0-9.eE]+)(?:\((?P<baseline>-?\d+)\))?(?:/(?P<unit>\S+|\S+(?:\s+[A-Za-z]\S*)+(?=\s+\d)))?"
    r"(?:\s+(?P<adcres>\d+)(?:\s+(?P<adczero>-?\d+)(?:\s+(?P<initial>-?\d+)(?:\s+(?P<checksum>-?\d+)(?:\s+(?P<block>\d+)"
    r"(?:\s+(?P<label>.*))?)?)?)?)?)?)?\s*$"
)


@dataclass(frozen=True)
class SignalLine:
    """One signal of a header. `gain` is stored steps a unit; `has_gain` is False where the header gives none and 200 stands in."""

    file: str
    fmt: str
    samples_per_frame: int
    skew: int
    offset: int
    gain: float
    baseline: int
    unit: str
    label: str
    has_gain: bool
    text: dict[str, str]


@dataclass(frozen=True)
class Segment:
    """A segment of a multi-segment record; the name ``~`` is a stretch in which nothing was recorded."""

    name: str
    n_frames: int


@dataclass(frozen=True)
class Header:
    """A header file. `n_frames` is None where the header does not say."""

    name: str
    frame_rate: float
    n_frames: int | None
    start_time: datetime | None
    signals: tuple[SignalLine, ...] = ()
    segments: tuple[Segment, ...] = ()
    comments: tuple[str, ...] = ()
    text: dict[str, str] = field(default_factory=dict)


def is_annotation_ending(ending: str) -> bool:
    """Whether a file ending could be the name of an annotator: letters and digits, and not that of another kind of file."""
    return ending.isalnum() and ending.lower() not in _NO_ANNOTATION


def safe_name(name: str, header: str) -> str:
    """A file or record name that stays in the folder of the header; FileError for any other."""
    if not name or name in (".", "..") or any(c in name for c in "/\\:\0") or name.startswith("-"):
        raise FileError(f"{header} names {name!r}; only plain names of files beside it are read")
    return name


def read_header(path: Path) -> Header:
    """Read and check a .hea file.

    Raises
    ------
    FileError
        No such file, or a line that is none of a header.
    """
    if not path.is_file():
        raise FileError(f"no such file: {path}")
    raw = path.read_bytes()
    if b"\0" in raw[:4096]:
        raise FileError(f"{path.name} is no WFDB header: it is not text")
    try:
        content = raw.decode("utf-8")
    except UnicodeDecodeError:
        content = raw.decode("latin-1")
    lines = [line.strip() for line in content.splitlines()]
    comments = tuple(line[1:].strip() for line in lines if line.startswith("#"))
    lines = [line for line in lines if line and not line.startswith("#")]
    if not lines:
        raise FileError(f"{path.name} is no WFDB header: it is empty")
    name, n_segments, n_signals, rate, n_frames, start = _record_line(path, lines[0])
    text = {"record_line": lines[0]}
    if n_segments is not None:
        segments = tuple(_segment(path, line) for line in lines[1:])
        if len(segments) != n_segments:
            raise FileError(f"{path.name} declares {n_segments} segments and lists {len(segments)}")
        return Header(name, rate, n_frames, start, (), segments, comments, text)
    if len(lines) - 1 != n_signals:
        raise FileError(f"{path.name} declares {n_signals} signals and describes {len(lines) - 1}")
    signals = tuple(_signal(path, line) for line in lines[1:])
    return Header(name, rate, n_frames, start, signals, (), comments, text)


def _record_line(path: Path, line: str) -> tuple[str, int | None, int, float, int | None, datetime | None]:
    words = line.split()
    name, _, segments = words[0].partition("/")
    try:
        n_segments = int(segments) if segments else None
        n_signals = int(words[1])
        rate = float(re.split(r"[/(]", words[2])[0]) if len(words) > 2 else _DEFAULT_RATE_HZ
        n_frames = int(words[3]) if len(words) > 3 else None
    except (ValueError, IndexError):
        raise FileError(f"{path.name} is no WFDB header: its first line is {line[:60]!r}") from None
    if not 0 <= n_signals <= _MOST_SIGNALS or not 0 < rate < 1e7 or (n_frames is not None and not 0 <= n_frames < 2**40):
        raise FileError(f"{path.name}: {n_signals} signals, {rate:g} Hz, {n_frames} samples; these cannot all be right")
    return name, n_segments, n_signals, rate, n_frames or None, _start_time(words[4:])


def _start_time(words: list[str]) -> datetime | None:
    """Time of day and date; without a date there is no start time."""
    if len(words) < 2:
        return None
    try:
        day, month, year = (int(part) for part in words[1].split("/"))
        clock = [float(part) for part in words[0].split(":")]
        hour, minute, second = ([0.0] * (3 - len(clock)) + clock)[:3]
        whole = int(second)
        return datetime(year, month, day, int(hour), int(minute), whole, min(999_999, round((second - whole) * 1e6)))
    except (ValueError, OverflowError):
        return None


def _segment(path: Path, line: str) -> Segment:
    words = line.split()
    try:
        name, count = words[0], int(words[1])
    except (ValueError, IndexError):
        raise FileError(f"{path.name}: {line[:60]!r} is no segment") from None
    if count < 0:
        raise FileError(f"{path.name}: segment {name!r} of {count} samples")
    return Segment(name if name == "~" else safe_name(name, path.name), count)


def _signal(path: Path, line: str) -> SignalLine:
    match = _LINE.match(line)
    if match is None:
        raise FileError(f"{path.name}: {line[:60]!r} describes no signal")
    t = {k: v for k, v in match.groupdict().items() if v is not None}
    try:
        gain = float(t.get("gain", 0.0))
    except ValueError:
        raise FileError(f"{path.name}: gain {t['gain']!r} is no number") from None
    if int(t.get("spf", 1)) < 1:
        raise FileError(f"{path.name}: {line[:60]!r} has no sample in a frame")
    zero = int(t.get("adczero", 0))
    baseline = int(t.get("baseline", zero))
    if (gain and not 1e-12 < abs(gain) < 1e12) or abs(baseline) > 2**53:
        raise FileError(f"{path.name}: gain {t.get('gain')!r} and baseline {baseline} give no calibration")
    unit = t.get("unit", "")
    if " " in unit and is_pressure_unit(unit):
        unit = unit.replace(" ", "")
    return SignalLine(
        file=t["file"] if t["file"] == "~" else safe_name(t["file"], path.name),
        fmt=t["fmt"],
        samples_per_frame=int(t.get("spf", 1)),
        skew=int(t.get("skew", 0)),
        offset=int(t.get("offset", 0)),
        gain=gain or _DEFAULT_GAIN,
        baseline=baseline,
        unit=unit or "mV",
        label=t.get("label", "").strip(),
        has_gain=bool(gain),
        text=t,
    )
