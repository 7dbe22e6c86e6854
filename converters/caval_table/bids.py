"""Annotation tracks as BIDS physiological events."""

from __future__ import annotations

import gzip
import json
from pathlib import Path

import numpy as np
import pandas as pd

from caval import vocabulary
from caval.errors import FileError
from caval.recording import Recording
from caval.track import Track

__all__ = ["read_physioevents", "write_physioevents"]

_ENDING = ".tsv.gz"


def write_physioevents(recording: Recording, track: Track, directory: Path, stem: str) -> tuple[Path, ...]:
    """Write STEM_physioevents.tsv.gz (no header row, as BIDS has it) and its description STEM_physioevents.json.

    Columns: onset and duration in seconds of the record, the annotation text as ``trial_type``, the channel's label; ``n/a`` where there
    is none. BIDS reads an onset as a row number unless a foreign index column is named, so one is: ``timestamp``, in seconds.
    """
    labels = np.array([*recording.labels, "n/a"], dtype=object)
    rows = pd.DataFrame({"onset": track.onset_s, "duration": track.duration_s, "trial_type": track.text, "channel": labels[track.channel]})
    table = directory / f"{stem}_physioevents{_ENDING}"
    with open(table, "wb") as file, gzip.GzipFile("", "wb", fileobj=file, mtime=0) as stream:  # equal content is an equal file
        stream.write(rows.to_csv(sep="\t", header=False, index=False, na_rep="n/a").encode("utf-8"))
    described = directory / f"{stem}_physioevents.json"
    waves = {vocabulary.mark_text(w): term.meaning for w, term in vocabulary.WAVES.items()}
    spans = {vocabulary.span_text(k): term.meaning for k, term in vocabulary.SPANS.items()}
    content = {
        "Columns": list(rows.columns),
        "Description": "Waves of the central venous pressure and stretches that cannot be read",
        "ForeignIndexColumn": "timestamp",
        "onset": {"Description": "Time from the start of the record", "Units": "s"},
        "duration": {"Description": "0 for a mark", "Units": "s"},
        "trial_type": {"Description": "What was marked", "Levels": waves | spans},
        "channel": {"Description": "Label of the channel"},
    }
    described.write_text(json.dumps(content, indent=2, ensure_ascii=False) + "\n", encoding="utf-8")
    return table, described


def read_physioevents(path: Path) -> Track:
    """Read a .tsv.gz of events by the columns that the .json beside it names; times in seconds.

    Raises
    ------
    FileError
        No such pair of files, no ``onset`` among the columns, or rows that do not fit them.
    """
    described = path.with_name(path.name.removesuffix(_ENDING) + ".json")
    try:
        columns = list(json.loads(described.read_text(encoding="utf-8"))["Columns"])
        times = {"onset": ["n/a"], "duration": ["n/a"]}
        rows = pd.read_csv(path, sep="\t", names=columns, na_values=times, keep_default_na=False)
        onset = rows["onset"].to_numpy(float)
        lasts = rows["duration"].to_numpy(float) if "duration" in rows else np.zeros(len(rows))
    except (OSError, EOFError, ValueError, KeyError, TypeError) as error:
        raise FileError(f"{path.name} and {described.name} are no BIDS events with an onset in seconds ({error})") from error
    text = next((rows[c] for c in ("trial_type", "message", "text") if c in rows), pd.Series("", index=rows.index, dtype=object))
    known = np.isfinite(onset)
    return Track.build(onset[known], text[known].astype(str).replace("n/a", "").to_numpy(object), duration_s=np.nan_to_num(lasts[known]))
