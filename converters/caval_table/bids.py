"""Annotation tracks as BIDS physiological events."""

from __future__ import annotations

import gzip
import json
from pathlib import Path

import numpy as np
import pandas as pd

from caval import vocabulary
from caval.recording import Recording
from caval.track import Track

__all__ = ["write_physioevents"]


def write_physioevents(recording: Recording, track: Track, directory: Path, stem: str) -> tuple[Path, ...]:
    """Write STEM_physioevents.tsv.gz (no header row, as BIDS has it) and its description STEM_physioevents.json.

    Columns: onset and duration in seconds of the record, the annotation text, the channel's label; ``n/a`` where there is none.
    """
    labels = np.array([*recording.labels, "n/a"], dtype=object)
    rows = pd.DataFrame({"onset": track.onset_s, "duration": track.duration_s, "text": track.text, "channel": labels[track.channel]})
    table = directory / f"{stem}_physioevents.tsv.gz"
    with gzip.GzipFile(table, "wb", mtime=0) as stream:  # without a time inside, equal content is an equal file
        stream.write(rows.to_csv(sep="\t", header=False, index=False, na_rep="n/a").encode("utf-8"))
    described = directory / f"{stem}_physioevents.json"
    waves = {vocabulary.mark_text(w): term.meaning for w, term in vocabulary.WAVES.items()}
    spans = {vocabulary.span_text(k): term.meaning for k, term in vocabulary.SPANS.items()}
    content = {
        "Columns": list(rows.columns),
        "Description": "Waves of the central venous pressure and stretches that cannot be read",
        "OnsetSource": "timestamp",
        "onset": {"Description": "Time from the start of the record", "Units": "s"},
        "duration": {"Description": "0 for a mark", "Units": "s"},
        "text": {"Description": "What was marked", "Levels": waves | spans},
        "channel": {"Description": "Label of the channel"},
    }
    described.write_text(json.dumps(content, indent=2, ensure_ascii=False) + "\n", encoding="utf-8")
    return table, described
