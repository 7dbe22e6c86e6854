"""Rhythms in annotation tracks: WFDB rhythm changes as `wfdb` reads them, EDF+ spans as MNE and edfio read them, and the way back."""

from __future__ import annotations

import warnings
from pathlib import Path

import edfio
import numpy as np
import pandas as pd
import pytest
import wfdb

from caval import tables, vocabulary
from caval.api import read_track
from caval.model.sketch import sketch
from caval.recording import Recording
from caval.registry import formats
from caval.track import Track
from caval.vocabulary import RHYTHM_CODE, RHYTHMS, parse_text, rhythm_text

STRETCHES = pd.DataFrame({
    "onset_s": [0.5, 8.0, 14.5, 20.25], "duration_s": [7.5, 6.5, 5.75, 8.0], "rhythm": ["sinus", "fibrillation", "unknown", "paced"],
})
DOCUMENTED = {
    "(AB", "(AFIB", "(AFL", "(B", "(BII", "(IVR", "(N", "(NOD", "(P", "(PREX", "(SBR", "(SVTA", "(T", "(VFL", "(VT",  # MIT-BIH Arrhythmia
    "(BI", "(HGEA", "(NSR", "(PM", "(VER", "(VF", "(VFIB",  # MIT-BIH Malignant Ventricular Ectopy, its list of aux strings on PhysioNet
    "(B3", "(SAB",  # European ST-T (from memory)
}
"""Rhythm strings of PhysioNet's databases."""


def drawn() -> Recording:
    return sketch(minutes=0.5, events=False).recording


def track(stretches: pd.DataFrame = STRETCHES) -> Track:
    marks = pd.DataFrame({"time_s": [1.0, 8.0, 15.0], "mark": ["a", "v", "x"]})
    spans = pd.DataFrame({"onset_s": [10.0], "duration_s": [1.0], "kind": ["noise"], "channel": ["CVP"]})
    channels = {label: i for i, label in enumerate(drawn().labels)}
    return Track.from_tables(marks, spans, channels=channels, roles={"cvp": "CVP", "ecg": "ECG II"}, rhythms=stretches)


def written(name: str, folder: Path, recording: Recording | None = None, stretches: pd.DataFrame = STRETCHES) -> dict[str, Path]:
    folder.mkdir(exist_ok=True)
    made = formats()[name].value.write_marked(recording or drawn(), track(stretches), folder, "rec")
    return {p.suffix: p for p in made}


def rhythms_of(read: Track) -> list[tuple[float, float, str]]:
    rows = zip(read.onset_s, read.duration_s, read.text, strict=True)
    return [(round(float(t), 3), round(float(d), 3), text) for t, d, text in rows if text.startswith("RHYTHM/")]


def test_every_string_is_one_that_physionet_documents():
    assert {term.wfdb for term in RHYTHMS.values()} - {""} <= DOCUMENTED


def test_wfdb_rhythm_changes_in_wfdb(tmp_path: Path):
    written("wfdb", tmp_path)
    theirs = wfdb.rdann(str(tmp_path / "rec"), "cvp")
    change = np.array(theirs.symbol) == "+"
    notes = np.array(theirs.aux_note)
    assert list(notes[change]) == ["(N", "(AFIB", "(P"]
    assert np.allclose(theirs.sample[change] / theirs.fs, [0.5, 8.0, 20.25], atol=0.5 / theirs.fs)
    assert wfdb.io.annotation.is_qrs[RHYTHM_CODE] is False  # no program takes it for a beat
    assert (np.array(theirs.symbol)[notes == "CVP/a"] == '"').all()


def test_a_rhythm_and_a_mark_at_one_tick_both_stand(tmp_path: Path):
    written("wfdb", tmp_path)
    theirs = wfdb.rdann(str(tmp_path / "rec"), "cvp")
    here = [note for sample, note in zip(theirs.sample, theirs.aux_note, strict=True) if sample == round(8.0 * theirs.fs)]
    assert sorted(here) == ["(AFIB", "CVP/v"]


def test_wfdb_there_and_back(tmp_path: Path):
    written("wfdb", tmp_path)
    texts = list(read_track(tmp_path / "rec.cvp").text)
    assert [t for t in texts if t.startswith("+")] == ["+ (N", "+ (AFIB", "+ (P"]
    assert "RHYTHM/unknown" in texts  # PhysioNet has no word for it, so it stays a note with a beginning and an end


def test_edf_spans_in_mne(tmp_path: Path):
    import mne

    path = written("edf", tmp_path)[".edf"]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        theirs = mne.io.read_raw_edf(path, preload=False, verbose="error").annotations
    ours = [a for a in theirs if a["description"].startswith("RHYTHM/")]
    assert [a["description"] for a in ours] == [rhythm_text(w) for w in STRETCHES["rhythm"]]
    assert np.allclose([a["onset"] for a in ours], STRETCHES["onset_s"], atol=1e-6)
    assert np.allclose([a["duration"] for a in ours], STRETCHES["duration_s"], atol=1e-6)
    assert not any(a["description"].startswith("BAD_") for a in ours)  # a rhythm spoils no epoch


def test_edf_spans_in_edfio(tmp_path: Path):
    theirs = edfio.read_edf(written("edf", tmp_path)[".edf"]).annotations
    ours = [(a.onset, a.duration, a.text) for a in theirs if a.text.startswith("RHYTHM/")]
    expected = zip(STRETCHES["onset_s"], STRETCHES["duration_s"], map(rhythm_text, STRETCHES["rhythm"]), strict=True)
    assert ours == [(pytest.approx(t, abs=1e-6), pytest.approx(d, abs=1e-6), text) for t, d, text in expected]


@pytest.mark.parametrize("name", ["edf", "csv", "bids"])
def test_there_and_back_keeps_onset_duration_and_word(tmp_path: Path, name: str):
    made = written(name, tmp_path)
    path = next(p for suffix, p in made.items() if suffix in (".edf", ".csv", ".gz"))
    assert rhythms_of(read_track(path)) == rhythms_of(track())


def test_rhythms_of_an_earlier_run_give_way(tmp_path: Path):
    first = written("edf", tmp_path / "one")[".edf"]
    later = pd.DataFrame({"onset_s": [2.0], "duration_s": [20.0], "rhythm": ["junctional"]})
    second = written("edf", tmp_path / "two", formats()["edf"].value.read(first), later)[".edf"]
    assert rhythms_of(read_track(second)) == [(2.0, 20.0, "RHYTHM/junctional")]


@pytest.mark.parametrize("word", RHYTHMS)
def test_a_text_says_its_rhythm(word):
    assert parse_text(rhythm_text(word)) == ("rhythm", "", word)
    assert parse_text(f"BAD_{rhythm_text(word)}") is None
    assert parse_text("RHYTHM/none-such") is None


def test_stretches_of_beats():
    said = ["sinus", "sinus", "ectopic", "sinus", "fibrillation", "fibrillation", "", "fibrillation", "sinus"]
    beats = pd.DataFrame({"r_time_s": np.arange(1.0, 10.0), "rhythm": said})
    stretches = tables.rhythm_stretches(beats)
    assert list(stretches["rhythm"]) == ["sinus", "fibrillation", "sinus"]
    assert list(stretches["onset_s"]) == [1.0, 5.0, 9.0]
    assert list(stretches["duration_s"]) == [4.0, 4.0, 0.0]
    assert not len(tables.rhythm_stretches(beats[:0]))
    assert set(stretches["rhythm"]) <= set(vocabulary.RHYTHMS)
