"""Annotation tracks as CSV."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from caval.errors import FileError
from caval.recording import Recording
from caval.track import Track
from caval.vocabulary import WAVES, mark_text

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
        blanks = {column: ["", "nan", "NaN", "NA", "n/a"] for column in (*_TIMES, "duration_s")}
        rows = pd.read_csv(path, keep_default_na=False, na_values=blanks)
    except (OSError, ValueError) as error:
        raise FileError(f"{path}: no table that can be read ({error})") from error
    time = next((c for c in _TIMES if c in rows), None)
    if time is None:
        raise FileError(f"{path} has no column of times; one of {', '.join(_TIMES)} is needed, it has: {', '.join(map(str, rows.columns))}")
    try:
        onset = rows[time].to_numpy(float)
        lasts = np.nan_to_num(rows["duration_s"].to_numpy(float)) if "duration_s" in rows else np.zeros(len(rows))
    except ValueError:
        raise FileError(f"{path}: column {time} or duration_s holds something that is no number of seconds") from None
    known = np.isfinite(onset)
    text = next((c for c in _TEXTS if c in rows), None) if time != "r_time_s" else None
    blank = np.full(len(rows), "R" if time == "r_time_s" else "", dtype=object)
    words = rows[text].astype(str).to_numpy(object) if text else blank
    if text == "mark":
        words = np.array([mark_text(w) if w in WAVES else w for w in words], dtype=object)  # our a is no WFDB beat letter
    return Track.build(onset[known], words[known], duration_s=lasts[known])
