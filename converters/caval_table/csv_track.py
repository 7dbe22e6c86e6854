"""Annotation tracks as CSV."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from caval.errors import FileError
from caval.recording import Recording
from caval.track import Track

__all__ = ["read_csv_track", "write_csv_track"]

_TIMES = ("r_time_s", "onset_s", "time_s")
_TEXTS = ("text", "annotation", "mark", "kind")


def write_csv_track(recording: Recording, track: Track, directory: Path, stem: str) -> tuple[Path, ...]:
    """Write STEM_track.csv: ``onset_s, duration_s, text, channel``, seconds of the record; `channel` is the label, empty for none."""
    labels = np.array([*recording.labels, ""], dtype=object)
    rows = pd.DataFrame({"onset_s": track.onset_s, "duration_s": track.duration_s, "text": track.text, "channel": labels[track.channel]})
    path = directory / f"{stem}_track.csv"
    rows.to_csv(path, index=False)
    return (path,)


def read_csv_track(path: Path) -> Track:
    """Read a table that has a column of times in seconds: ``r_time_s``, ``onset_s`` or ``time_s``.

    Texts come from ``text``, ``annotation``, ``mark`` or ``kind``; a table of ``r_time_s`` holds beats. Rows without a time are left out.

    Raises
    ------
    FileError
        No such file, no table, no column of times, or a time that is no number.
    """
    try:
        rows = pd.read_csv(path)
    except (OSError, ValueError) as error:
        raise FileError(f"{path}: no table that can be read ({error})") from error
    time = next((c for c in _TIMES if c in rows), None)
    if time is None:
        raise FileError(f"{path} has no column of times; one of {', '.join(_TIMES)} is needed, it has: {', '.join(map(str, rows.columns))}")
    if not pd.api.types.is_numeric_dtype(rows[time]):
        raise FileError(f"{path}: column {time} holds something that is no number of seconds")
    rows = rows[np.isfinite(rows[time].to_numpy(float))]
    text = next((c for c in _TEXTS if c in rows), None) if time != "r_time_s" else None
    if text:
        words = rows[text].fillna("").astype(str).to_numpy(object)
    else:
        words = np.full(len(rows), "R" if time == "r_time_s" else "", dtype=object)
    lasts = rows["duration_s"].fillna(0.0).to_numpy(float) if "duration_s" in rows else 0.0
    return Track.build(rows[time].to_numpy(float), words, duration_s=lasts)
