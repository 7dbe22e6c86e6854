"""What the pipeline found in a record: tables, track, figure, and the files of the contract."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

import caval
from caval import registry, tables
from caval._files import write_all
from caval.errors import InputError
from caval.recording import Recording
from caval.stages._picture import FEWEST
from caval.track import Track

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from caval.pipeline import Pipeline

__all__ = ["Result"]

_NAMED = ("beats", "marks", "spans", "readings", "coupling", "atria", "rhythms", "delay")
"""Tables that the result, or the beat table, takes up."""


@dataclass(frozen=True, eq=False)
class Result:
    """Tables by the contract of columns.

    Attributes
    ----------
    recording : Recording
    roles : mapping of str to str
        Channel label of each role.
    beats, marks, spans : DataFrame
        A row per beat, mark and span, in time order; seconds of the record, mmHg; NaN where a wave is absent.
    others : mapping of str to DataFrame
        Further tables that stages gave (``breaths``, ``trend``).
    run : mapping
        Version, stages, settings, roles, counts: what STEM_run.json holds, without the input's hash.
    warnings : tuple of str
        Plain statements of what could not be done, and why.
    """

    recording: Recording
    roles: Mapping[str, str]
    beats: pd.DataFrame
    marks: pd.DataFrame
    spans: pd.DataFrame
    others: Mapping[str, pd.DataFrame] = field(default_factory=dict)
    run: Mapping[str, Any] = field(default_factory=dict)
    warnings: tuple[str, ...] = ()

    @classmethod
    def build(
        cls,
        recording: Recording,
        roles: Mapping[str, str],
        done: Mapping[str, pd.DataFrame],
        *,
        pipeline: Pipeline,
        stretch: tuple[float, float | None],
        units: Mapping[str, str],
    ) -> Result:
        """The result of a pipeline's tables."""
        table = {name: done.get(name, tables.empty(name)) for name in _NAMED}
        renumber = dict(zip(table["beats"]["beat"], range(len(table["beats"])), strict=True))
        for name in ("beats", "marks", "readings", "coupling", "atria", "rhythms"):
            kept = table[name][table[name]["beat"].isin(renumber)]
            table[name] = kept.assign(beat=kept["beat"].map(renumber).astype("int64")).reset_index(drop=True)
        beats = tables.beat_table(table["beats"], table["marks"], table["readings"], table["coupling"], table["rhythms"])
        warnings = _statements(recording, roles, beats, table["marks"], table["spans"])
        run = {
            "program": "caval",
            "version": caval.__version__,
            "record": recording.name,
            "roles": dict(roles),
            "units": dict(units),
            "start_s": stretch[0],
            "stop_s": stretch[1],
            "stages": [pipeline.choose.get(s, s) for s in pipeline.stages],
            "detectors": list(pipeline.detectors),
            "settings": pipeline.settings_used(),
            **_delay(table["delay"]),
            "counts": {
                "beats": len(beats),
                "usable_beats": int(beats["usable"].sum()),
                "marks": {str(k): int(v) for k, v in table["marks"]["mark"].value_counts().sort_index().items()},
                "spans": {str(k): int(v) for k, v in table["spans"]["kind"].value_counts().sort_index().items()},
            },
            "warnings": list(warnings),
            "notice": "Research software, not a medical device.",
        }
        others = {k: v for k, v in done.items() if k not in (*table, "candidates")}
        others |= {"atria": table["atria"]} if "atria" in done else {}
        return cls(recording, dict(roles), beats, table["marks"], table["spans"], others, run, warnings)

    @property
    def rhythm_text(self) -> str:
        """How many beats each rhythm has, commonest first: ``sinus 372, fibrillation 90``; empty without rhythms."""
        counts = self.beats["rhythm"].replace("", np.nan).value_counts()
        return ", ".join(f"{word} {count}" for word, count in counts.items())

    @property
    def delay_text(self) -> str:
        """The delay of the pressure channel, its doubt and what it rests on; empty where none was looked for."""
        delay_s, sd_s = (self.run.get(name) for name in ("delay_s", "delay_sd_s"))
        return "" if delay_s is None or sd_s is None else f"{1000 * delay_s:.0f} ms, SD {1000 * sd_s:.0f} ({self.run['delay_basis']})"

    @property
    def track(self) -> Track:
        """Our marks, spans and rhythms as an annotation track."""
        channels = {label: i for i, label in reversed(list(enumerate(self.recording.labels)))}
        return Track.from_tables(
            self.marks, self.spans, channels=channels, roles=self.roles, rhythms=tables.rhythm_stretches(self.beats)
        )

    def plot(self) -> Figure:
        """The figure of the record: a strip with marks, the median beat, the trend."""
        from caval.report.figure import figure

        return figure(self)

    def write(
        self,
        directory: str | Path,
        *,
        stem: str | None = None,
        table: str = "parquet",
        track: Sequence[str] | None = None,
        force: bool = False,
        figure: bool = True,
    ) -> list[Path]:
        """Write the files of the contract into `directory`; all of them or none.

        Parameters
        ----------
        table : {"parquet", "csv"}
        track : sequence of str, optional
            Formats of the annotation track; the record's own format by default.
        force : bool
            Overwrite files that are there.

        Raises
        ------
        FileError
            A file is in the way or cannot be written.
        InputError
            An unknown kind of table.
        """
        if table not in ("parquet", "csv"):
            raise InputError(f"table {table!r}; allowed: parquet, csv")
        stem = stem or self.recording.name
        directory = Path(directory)
        kinds = list(track) if track else [self.recording.format or "csv"]
        writers = [registry.pick(registry.formats(), kind, "track format") for kind in kinds]
        for kind, writer in zip(kinds, writers, strict=True):
            if writer.write_marked is None:
                able = ", ".join(k for k, f in registry.formats().items() if f.value.write_marked is not None)
                raise InputError(f"format {kind!r} holds no annotation track; allowed: {able}")

        def make(folder: Path) -> None:
            for name, rows in {"beats": self.beats, "marks": self.marks, "spans": self.spans, **self.others}.items():
                _write_table(rows, folder / f"{stem}_{name}.{table}")
            for writer in writers:
                writer.write_marked(self.recording, self.track, folder, stem)
            if figure:
                self.plot().savefig(folder / f"{stem}.png")
            _write_json({**self.run, **_fingerprints(self.recording)}, folder / f"{stem}_run.json")

        return write_all(directory, make, force=force, never=self.recording.files)


def _delay(rows: pd.DataFrame) -> dict[str, Any]:
    """The delay of the whole record: the median over its parts, with their uncertainty, which is that of hearts and not of beats."""
    if not len(rows):
        return {"delay_s": None, "delay_sd_s": None, "delay_basis": None, "p_a_s": None, "r_c_s": None}
    middle = {name: rows[name].median() for name in ("delay_s", "delay_sd_s", "p_a_s", "r_c_s")}
    said = {name: None if pd.isna(value) else round(float(value), 4) for name, value in middle.items()}
    return {**said, "delay_basis": str(rows["basis"].mode().iloc[0])}


def _statements(
    recording: Recording, roles: Mapping[str, str], beats: pd.DataFrame, marks: pd.DataFrame, spans: pd.DataFrame
) -> tuple[str, ...]:
    """What a reader must know that the tables do not shout."""
    said = list(recording.notes)
    if "ecg" not in roles:
        rest = "the arterial trace alone" if "abp" in roles else "the venous waves alone, which tell R to 0.06 s at best"
        said.append(f"no ECG channel; beats rest on {rest}")
    if not len(beats):
        said.append("no beats found, so no marks")
    elif not len(marks):
        said.append(f"no marks: {_why_no_marks(roles['cvp'], beats, spans)}")
    return tuple(said)


def _why_no_marks(label: str, beats: pd.DataFrame, spans: pd.DataFrame) -> str:
    mine = spans[spans["channel"] == label]
    usable = int(beats["usable"].sum())
    if len(mine) and not usable:
        longest = mine.groupby("kind")["duration_s"].sum().sort_values(ascending=False)
        detail = mine.loc[mine["kind"] == longest.index[0], "detail"].iloc[0]
        return f"{label!r} cannot be read for {longest.iloc[0]:.0f} s: {longest.index[0]} ({detail})"
    if usable < FEWEST:
        return f"{usable} usable beats; the picture of the cardiac cycle that guides the marks needs {FEWEST} within a minute"
    return "no wave stands out of the noise"


def _write_table(rows: pd.DataFrame, path: Path) -> None:
    if path.suffix == ".csv":
        rows.to_csv(path, index=False)
    else:
        rows.to_parquet(path, index=False)


def _write_json(content: Mapping[str, Any], path: Path) -> None:
    path.write_text(json.dumps(content, indent=2, ensure_ascii=False, default=str) + "\n", encoding="utf-8")


def _fingerprints(recording: Recording) -> dict[str, Any]:
    """Name and SHA-256 of the input, and of each of its files; a record made in memory has none."""
    sums = {path.name: _sha256(path) for path in recording.files}
    name = recording.path.name if recording.path is not None else recording.name
    return {"input": {"name": name, "sha256": sums.get(name)}, "files": sums}


def _sha256(path: Path) -> str:
    with open(path, "rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()
