"""Tables as tracks: CSV and BIDS physiological events."""

from __future__ import annotations

import gzip
import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import caval
from caval.api import read_track
from caval.errors import FileError, InputError
from caval.track import Track
from caval_table import BIDS, CSV
from compliance import one_line, record, same_annotations, track


@pytest.mark.parametrize("kind", [CSV, BIDS])
def test_a_track_comes_back_to_the_last_digit(tmp_path: Path, kind: caval.registry.Format) -> None:
    texts = ["CVP/a", 'say "hi",\tthen go', "Blutdruck fällt", "NA"]
    sent = Track.build([1 / 3, 0.0, -1.5, 1e5 + 1e-6], texts, duration_s=[0, 1 / 7, 0, 0])
    made = kind.write_marked(record(), sent, tmp_path, "rec")
    same_annotations(read_track(made[0]), sent, 1e-9)  # the parser of older pandas is off by a last digit


@pytest.mark.parametrize("kind", [CSV, BIDS])
def test_an_empty_track(tmp_path: Path, kind: caval.registry.Format) -> None:
    made = kind.write_marked(record(), Track.empty(), tmp_path, "rec")
    assert not len(read_track(made[0]))


def test_csv_as_another_program_reads_it(tmp_path: Path) -> None:
    sent = Track.build([1.0, 2.0], ["CVP/a", "BAD_CVP/flat"], duration_s=[0.0, 1.5], channel=[1, 1])
    (path,) = CSV.write_marked(record(), sent, tmp_path, "rec")
    assert path.name == "rec_track.csv"
    rows = pd.read_csv(path)
    assert list(rows.columns) == ["onset_s", "duration_s", "text", "channel"]
    assert list(rows["channel"]) == ["CVP", "CVP"]


@pytest.mark.parametrize(("column", "words"), [("r_time_s", ["R", "R"]), ("time_s", ["", ""]), ("onset_s", ["", ""])])
def test_any_table_with_a_column_of_times_holds_beats(tmp_path: Path, column: str, words: list[str]) -> None:
    path = tmp_path / "beats.csv"
    path.write_text(f"beat,{column}\n0,0.5\n1,1.25\n2,\n")
    got = read_track(path)
    assert list(got.text) == words
    np.testing.assert_array_equal(got.beat_times_s(), [0.5, 1.25])


def test_marks_of_a_table_of_marks(tmp_path: Path) -> None:
    path = tmp_path / "rec_marks.csv"
    path.write_text("time_s,mark,beat\n0.5,a,0\n0.6,c,0\n")
    track = read_track(path)
    assert list(track.text) == ["CVP/a", "CVP/c"]  # the bare letter a is a WFDB beat code
    with pytest.raises(InputError):
        track.beat_times_s()


@pytest.mark.parametrize("content", ["", "a,b\n1,2\n", "time_s\nnoon\n", "time_s,text\n\"1.0\n"])
def test_tables_without_times(tmp_path: Path, content: str) -> None:
    path = tmp_path / "beats.csv"
    path.write_text(content)
    with pytest.raises(FileError) as error:
        read_track(path)
    assert "beats.csv" in one_line(error)


def test_bids_events_by_the_specification(tmp_path: Path) -> None:
    """No header row; onset and duration first; a foreign index column, since onsets without one are row numbers."""
    table, described = BIDS.write_marked(record(), track(), tmp_path, "sub-01_task-rest")
    assert [p.name for p in (table, described)] == ["sub-01_task-rest_physioevents.tsv.gz", "sub-01_task-rest_physioevents.json"]
    content = json.loads(described.read_text(encoding="utf-8"))
    assert content["Columns"][:3] == ["onset", "duration", "trial_type"]
    assert content["ForeignIndexColumn"] == "timestamp"
    rows = gzip.decompress(table.read_bytes()).decode().splitlines()
    assert len(rows) == len(track())
    assert {len(row.split("\t")) for row in rows} == {len(content["Columns"])}
    assert all(column in content for column in content["Columns"])
    again = tmp_path / "again"
    again.mkdir()
    assert BIDS.write_marked(record(), track(), again, "x")[0].read_bytes() == table.read_bytes()


@pytest.mark.parametrize("broken", ["json", "table", "no json", "no onset"])
def test_broken_bids_events(tmp_path: Path, broken: str) -> None:
    table, described = BIDS.write_marked(record(), track(), tmp_path, "rec")
    if broken == "json":
        described.write_text("{")
    elif broken == "table":
        table.write_bytes(b"no gzip")
    elif broken == "no onset":
        described.write_text('{"Columns": ["a"]}')
    else:
        described.unlink()
    with pytest.raises(FileError) as error:
        read_track(table)
    one_line(error)
