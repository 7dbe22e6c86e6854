"""`write_marked` of every format: the track of a result, opened by the libraries that laboratories use, is the track; and the way back."""

from __future__ import annotations

import gzip
import json
import warnings
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import wfdb

import caval
from caval import vocabulary
from caval.api import read_track
from caval.model.sketch import sketch
from caval.recording import Recording
from caval.registry import formats
from caval.track import Track
from compliance import record, same_annotations

TICK = 1 / 500 + 1e-9
"""Marks lie on the nearest tick, half of one off; at 0 s, where wfdb loses notes, a whole one."""
ROLES = {"cvp": "CVP", "ecg": "ECG II", "abp": "ABP"}
OTHERS = Track.build([0.25, 12.0, 29.0], ["intubation", "PEEP 10", "R"], duration_s=[0.0, 3.5, 0.0])


def drawn() -> Recording:
    """Half a minute of a drawn record, with annotations of others."""
    return sketch(minutes=0.5, events=False).recording.with_track("annotations", OTHERS)


def result_track(n: int = 400, *, shift_s: float = 0.0) -> Track:
    """What a result holds: marks in time order, also at 0 s and in the last sample, and spans of two channels."""
    time = np.sort(np.random.default_rng(9).uniform(0.01, 29.98, n)) + shift_s
    time[[0, -1]] = 0.0, 29.9924
    marks = pd.DataFrame({"time_s": time, "mark": ["acxvy"[i % 5] for i in range(n)]})
    spans = pd.DataFrame({
        "onset_s": [0.0, 3.0004, 10.0, 28.0], "duration_s": [1.25, 0.5, 4.0, 2.0], "kind": ["flat", "clipped", "noise", "drift"],
        "channel": ["CVP", "ABP", "ECG II", "CVP"],
    })
    return Track.from_tables(marks, spans, channels={label: i for i, label in enumerate(drawn().labels)}, roles=ROLES)


def marked(name: str, recording: Recording, track: Track, folder: Path) -> tuple[Path, ...]:
    folder.mkdir(exist_ok=True)
    made = formats()[name].value.write_marked(recording, track, folder, "rec")
    assert {p.name for p in made} == {p.name for p in folder.iterdir()}
    return made


def of_ours(track: Track) -> Track:
    return track.take(np.array([vocabulary.parse_text(t) is not None for t in track.texts] + [False])[track.code])


def test_edf_in_mne(tmp_path: Path) -> None:
    import mne

    (path,) = marked("edf", drawn(), result_track(), tmp_path)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # MNE on units it does not know
        raw = mne.io.read_raw_edf(path, verbose="error")
    notes = raw.annotations
    seen = Track.build(notes.onset, list(notes.description), duration_s=notes.duration)
    same_annotations(seen, OTHERS.join(result_track()), 1e-6)  # MNE keeps microseconds
    assert {d for d in notes.description if d.startswith("BAD_")} == {"BAD_CVP/flat", "BAD_ABP/clipped", "BAD_ECG/noise"}
    events, ids = mne.events_from_annotations(raw, regexp="^CVP/[acxvyzh]$", verbose="error")
    assert len(events) == 400
    assert set(ids) == {"CVP/a", "CVP/c", "CVP/x", "CVP/v", "CVP/y"}


def test_edf_in_pyedflib(tmp_path: Path) -> None:
    import pyedflib

    (path,) = marked("edf", drawn(), result_track(), tmp_path)
    with pyedflib.EdfReader(str(path)) as reader:
        onset, duration, text = reader.readAnnotations()
        digital = [reader.readSignal(i, digital=True) for i in range(3)]
    seen = Track.build(onset, list(text), duration_s=np.array([max(0.0, float(d)) for d in duration]))
    same_annotations(seen, OTHERS.join(result_track()), 1.01e-4)  # pyedflib: 0.1 ms
    for channel, read in zip(drawn().channels, digital, strict=True):
        np.testing.assert_array_equal(read, channel.digital())


def test_edf_in_edfio(tmp_path: Path) -> None:
    import edfio

    (path,) = marked("edf", drawn(), result_track(), tmp_path)
    notes = edfio.read_edf(path).annotations
    seen = Track.build([n.onset for n in notes], [n.text for n in notes], duration_s=[n.duration or 0.0 for n in notes])
    same_annotations(seen, OTHERS.join(result_track()), 1e-9)


def test_wfdb_in_wfdb(tmp_path: Path) -> None:
    made = marked("wfdb", drawn(), result_track(), tmp_path)
    assert {p.name for p in made} == {"rec.hea", "rec.dat", "rec.atr", "rec.cvp"}
    read = wfdb.rdann(str(tmp_path / "rec"), "cvp")
    assert read.fs == 500
    is_mark = np.array([len(text) == len("CVP/a") for text in read.aux_note])
    marks = result_track().marks()
    assert is_mark.sum() == 400
    assert [text for text in read.aux_note if len(text) == len("CVP/a")] == [vocabulary.mark_text(m) for m in marks["mark"]]
    assert np.abs(read.sample[is_mark] / 500 - marks["time_s"])[1:].max() <= TICK / 2
    assert read.sample[is_mark][0] == 1
    assert set(read.chan[is_mark]) == {1}
    rest = {(text, int(chan)) for text, chan in zip(read.aux_note, read.chan, strict=True) if len(text) > len("CVP/a")}
    spans = (("BAD_CVP/flat", 1), ("BAD_ABP/clipped", 2), ("BAD_ECG/noise", 0), ("CVP/drift", 1))
    assert rest == {(text + end, channel) for text, channel in spans for end in (" begin", " end")}
    for channel, values in zip(drawn().channels, wfdb.rdrecord(str(tmp_path / "rec"), physical=False, smooth_frames=False).e_d_signal,
                               strict=True):
        np.testing.assert_array_equal(values, channel.digital())
    same_annotations(read_track(tmp_path / "rec.cvp"), result_track(), TICK)
    same_annotations(read_track(tmp_path / "rec.atr"), OTHERS, TICK / 2)


def test_wfdb_beside_a_wfdb_record_touches_nothing_else(tmp_path: Path) -> None:
    caval.write(drawn(), tmp_path / "in" / "rec.hea")
    before = {p.name: p.read_bytes() for p in (tmp_path / "in").iterdir()}
    made = marked("wfdb", caval.read(tmp_path / "in" / "rec.hea"), result_track(), tmp_path / "out")
    assert [p.name for p in made] == ["rec.cvp"]
    assert {p.name: p.read_bytes() for p in (tmp_path / "in").iterdir()} == before
    (tmp_path / "in" / "rec.cvp").write_bytes((tmp_path / "out" / "rec.cvp").read_bytes())
    tracks = caval.read(tmp_path / "in" / "rec").tracks
    same_annotations(tracks["cvp"], result_track(), TICK)
    same_annotations(tracks["atr"], OTHERS, TICK / 2)


@pytest.mark.parametrize("name", ["edf", "wfdb"])
def test_marks_of_an_earlier_run_give_way_and_others_stay(tmp_path: Path, name: str) -> None:
    (first,) = marked("edf", drawn(), result_track(), tmp_path / "first")
    later = result_track(100)
    marked(name, caval.read(first), later, tmp_path / "second")
    got = caval.read(tmp_path / "second" / ("rec_marked.edf" if name == "edf" else "rec.hea"))
    same_annotations(of_ours(got.annotations), later, TICK)
    rest = got.annotations.take(~np.isin(got.annotations.text, list(set(later.texts))))
    same_annotations(rest, OTHERS, TICK)


def test_no_marks(tmp_path: Path) -> None:
    """Spans alone make no .cvp file; the EDF copy, whose file is also the signals', is written with what there is."""
    spans = of_ours(result_track()).take(result_track().duration_s > 0)
    for number, track in enumerate((Track.empty(), spans)):
        assert not len(track.marks())
        made = marked("wfdb", drawn(), track, tmp_path / f"w{number}")
        assert {p.name for p in made} == {"rec.hea", "rec.dat", "rec.atr"}
        assert marked("wfdb", caval.read(tmp_path / f"w{number}" / "rec.hea"), track, tmp_path / f"beside{number}") == ()
        made = marked("edf", drawn(), track, tmp_path / f"e{number}")
        same_annotations(read_track(made[0]), OTHERS.join(track), 1e-9)
        for name in ("csv", "bids"):
            same_annotations(read_track(marked(name, drawn(), track, tmp_path / f"{name}{number}")[0]), track, 1e-9)


def test_csv_in_pandas(tmp_path: Path) -> None:
    (path,) = marked("csv", drawn(), result_track(), tmp_path)
    rows = pd.read_csv(path)
    assert list(rows.columns) == ["onset_s", "duration_s", "text", "channel"]
    assert rows["onset_s"].is_monotonic_increasing
    assert len(rows) == 404
    np.testing.assert_array_equal(rows.loc[rows["duration_s"] == 0, "onset_s"], result_track().marks()["time_s"])
    told = set(zip(rows["text"], rows["channel"], strict=True))
    assert told >= {("CVP/a", "CVP"), ("BAD_ABP/clipped", "ABP"), ("BAD_ECG/noise", "ECG II")}


def test_bids_in_pandas(tmp_path: Path) -> None:
    table, described = marked("bids", drawn(), result_track(), tmp_path)
    content = json.loads(described.read_text(encoding="utf-8"))
    first = gzip.decompress(table.read_bytes()).split(b"\n", 1)[0].split(b"\t")
    assert float(first[0]) == 0.0  # no header row
    rows = pd.read_csv(table, sep="\t", header=None, names=content["Columns"])
    assert len(rows) == 404
    np.testing.assert_allclose(rows.loc[rows["duration"] == 0, "onset"], result_track().marks()["time_s"], rtol=0, atol=1e-12)
    levels = content["trial_type"]["Levels"]
    assert set(rows["trial_type"]) - set(levels) <= {"BAD_ABP/clipped", "BAD_ECG/noise"}  # spans of other channels are said alike


def test_thousands_of_marks_in_a_short_record(tmp_path: Path) -> None:
    """Many times what any heart does, in 8 s with three data rates: all kept, in all formats."""
    onset = np.linspace(3.0, 3.9, 6000)
    track = Track.build(onset, [f"CVP/{'acxvy'[i % 5]}" for i in range(6000)], channel=1)
    for name in ("edf", "wfdb", "csv", "bids"):
        made = marked(name, record(), track, tmp_path / name)
        path = next(p for p in made if p.suffix in (".edf", ".cvp", ".csv", ".gz"))
        got = read_track(path)
        assert len(got) == 6000
        np.testing.assert_allclose(got.onset_s, onset, rtol=0, atol=TICK / 2 if name == "wfdb" else 1e-9)


def test_there_and_back_is_the_same_file(tmp_path: Path) -> None:
    """EDF to WFDB to EDF to the byte, where annotations lie on ticks; the samples of WFDB to EDF to WFDB to the byte."""
    notes = Track.build([0.5, 1.25, 3.0], ["intubation", "Müller: 5 µg", "PEEP"], duration_s=[0.0, 0.75, 2.0])
    caval.write(record().with_track("annotations", notes), tmp_path / "a.edf")
    for source, target in (("a.edf", "b.hea"), ("b.hea", "c.edf"), ("c.edf", "d.hea")):
        caval.convert(tmp_path / source, tmp_path / target)
    assert (tmp_path / "c.edf").read_bytes() == (tmp_path / "a.edf").read_bytes()
    for ending in ("dat", "atr"):
        assert (tmp_path / f"d.{ending}").read_bytes() == (tmp_path / f"b.{ending}").read_bytes()
    assert (tmp_path / "d.hea").read_text().replace("d.dat", "b.dat")[1:] == (tmp_path / "b.hea").read_text()[1:]
