"""WFDB annotation files: annot(5), against wfdb both ways, and the limits that other writers pass over."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import wfdb

import caval
from caval.api import read_track
from caval.errors import FileError, InputError
from caval.recording import Recording
from caval.track import Track
from caval_wfdb.annotation import track_bytes
from caval_wfdb.codec import decode, encode
from compliance import one_line, record, track


def write(tmp_path: Path, recording: Recording, name: str = "rec") -> Path:
    path = tmp_path / f"{name}.hea"
    caval.write(recording, path)
    return path


def test_annotations_are_those_that_wfdb_reads(tmp_path: Path) -> None:
    write(tmp_path, record().with_track("annotations", track()))
    theirs = wfdb.rdann(str(tmp_path / "rec"), "atr")
    assert theirs.fs == 500
    assert set(theirs.symbol) == {'"'}
    assert list(theirs.aux_note).count("same time begin") == list(theirs.aux_note).count("same time end") == 1
    assert list(theirs.sample[:2]) == [-750, 1]  # at 0 s a note would vanish there: it stands one tick later


def test_beats_codes_and_fields_go_through(tmp_path: Path) -> None:
    """A file of wfdb's own, read and written by us, read by wfdb."""
    write(tmp_path, record())
    sent = {
        "sample": np.array([10, 400, 900, 1500, 1500, 200_000]), "symbol": ["N", "V", "+", '"', "p", "N"],
        "subtype": np.array([0, 1, 0, -128, 0, 127]), "chan": np.array([0, 0, 2, 255, 1, 0]), "num": np.array([0, 3, 0, 0, 5, 127]),
        "aux_note": ["", "fusion?", "(AFIB", "note", "", ""],
    }
    wfdb.wrann("rec", "man", fs=500, write_dir=str(tmp_path), **{k: v.copy() for k, v in sent.items()})
    got = caval.read(tmp_path / "rec")
    assert list(got.tracks) == ["man"]
    assert list(got.tracks["man"].text) == ["N", "V fusion?", "+ (AFIB", "note", "p", "N"]
    np.testing.assert_array_equal(got.tracks["man"].onset_s, sent["sample"] / 500)
    np.testing.assert_allclose(got.tracks["man"].beat_times_s(), [0.02, 0.8, 400.0])
    write(tmp_path, got, "copy")
    copy = wfdb.rdann(str(tmp_path / "copy"), "man")
    for name in ("sample", "subtype", "num"):
        np.testing.assert_array_equal(getattr(copy, name), sent[name], err_msg=name)
    assert copy.symbol == sent["symbol"]
    assert copy.aux_note == sent["aux_note"]


def test_annotations_of_others_keep_their_signal(tmp_path: Path) -> None:
    """The `chan` of a file that may leave it 0 for want of one says nothing of a channel, yet travels."""
    write(tmp_path, record())
    sent = {
        "sample": np.array([10, 20, 30]), "symbol": ["N", "V", '"'], "chan": np.array([1, 255, 2]), "aux_note": ["", " two  blanks", "x"],
    }
    wfdb.wrann("rec", "man", fs=500, write_dir=str(tmp_path), **{k: v.copy() for k, v in sent.items()})
    got = caval.read(tmp_path / "rec")
    assert set(got.annotations.channel) == {-1}
    write(tmp_path, got, "copy")
    copy = wfdb.rdann(str(tmp_path / "copy"), "man")
    assert copy.chan.tolist() == [1, 255, 2]
    assert copy.aux_note == sent["aux_note"]


@pytest.mark.parametrize("name", ["", "edf", "txt", "hea", "my marks", "annotations", "atr", "ÄÖ"])
def test_any_name_of_a_track_gives_a_file_that_is_read_again(tmp_path: Path, name: str) -> None:
    path = write(tmp_path, record().with_track(name, Track.build([1.0], ["x"])))
    assert {p.suffix for p in tmp_path.iterdir()}.isdisjoint({".edf", ".txt"})
    assert list(caval.read(path).annotations.text) == ["x"]


def test_ticks_of_another_rate_are_rescaled(tmp_path: Path) -> None:
    write(tmp_path, record())
    wfdb.wrann("rec", "slow", np.array([100, 250]), symbol=["N", "N"], fs=100, write_dir=str(tmp_path))
    wfdb.wrann("rec", "none", np.array([100, 250]), symbol=["N", "N"], write_dir=str(tmp_path))
    got = caval.read(tmp_path / "rec.hea").tracks
    np.testing.assert_allclose(got["slow"].onset_s, [1.0, 2.5])
    np.testing.assert_allclose(got["none"].onset_s, [100 / 25, 250 / 25])  # without a statement: frames


def test_a_truncated_annotation_file_says_so(tmp_path: Path) -> None:
    """wfdb returns what there is, without a word."""
    write(tmp_path, record().with_track("annotations", track()))
    path = tmp_path / "rec.atr"
    whole = path.read_bytes()
    for keep in range(2, len(whole) - 1, 7):
        path.write_bytes(whole[:keep])
        with pytest.raises(FileError) as error:
            read_track(path)
        assert "rec.atr" in one_line(error)
    got = caval.read(tmp_path / "rec.hea")
    assert not got.tracks
    assert "annotations left out" in got.notes[0]


def test_other_files_beside_a_record_are_left_alone(tmp_path: Path) -> None:
    write(tmp_path, record())
    (tmp_path / "rec.txt").write_text("notes")
    (tmp_path / "rec_marked.edf").write_bytes(b"x")
    (tmp_path / "rec2.atr").write_bytes(b"\0\0")
    got = caval.read(tmp_path / "rec.hea")
    assert not got.tracks
    assert not got.notes


def test_texts_at_the_limit_of_255_bytes(tmp_path: Path) -> None:
    """A text of 256 bytes corrupts a file that wfdb writes, without an error."""
    track_ = Track.build([1.0, 2.0], ["x" * 255, "after"])
    (tmp_path / "rec.cvp").write_bytes(track_bytes(track_, 500.0))
    assert wfdb.rdann(str(tmp_path / "rec"), "cvp").aux_note == ["x" * 255, "after"]
    with pytest.raises(InputError, match="256 bytes; WFDB holds 255") as error:
        track_bytes(Track.build([1.0], ["x" * 256]), 500.0)
    one_line(error)


def test_texts_of_others_in_utf_8_and_latin_1(tmp_path: Path) -> None:
    """Texts are bytes of no stated encoding. We write Latin-1; what reads as UTF-8 in a stranger's file is that."""
    raw = track_bytes(Track.build([1.0], ["fällt"]), 500.0)
    assert b"f\xe4llt" in raw
    for text in ("fällt", "ciś", "中"):
        held = text.encode("utf-8").ljust(6, b".")
        note = raw[: raw.index(b"f\xe4llt") - 2] + (63 << 10 | 6).to_bytes(2, "little") + held + b"\0\0"
        (tmp_path / "rec.cvp").write_bytes(note)
        assert read_track(tmp_path / "rec.cvp").text[0].rstrip(".") == text


def test_long_silences(tmp_path: Path) -> None:
    onset = np.array([0.5, 0.5 + 1023 / 500, 0.5 + 2047 / 500, 5000.0, 4_000_000.0])
    (tmp_path / "rec.cvp").write_bytes(track_bytes(Track.build(onset, list("12345")), 500.0))
    np.testing.assert_allclose(read_track(tmp_path / "rec.cvp").onset_s, onset, atol=1e-9)
    np.testing.assert_array_equal(wfdb.rdann(str(tmp_path / "rec"), "cvp").sample, np.rint(onset * 500))
    with pytest.raises(InputError, match="ticks apart"):
        track_bytes(Track.build([0.0, 1e8], ["a", "b"]), 500.0)


def test_spans_of_one_text_that_follow_or_overlap(tmp_path: Path) -> None:
    spans = Track.build([1.0, 2.0, 2.5], ["BAD_CVP/flat"] * 3, duration_s=[1.0, 1.0, 4.0], channel=1)
    (tmp_path / "rec.cvp").write_bytes(track_bytes(spans, 500.0))
    got = read_track(tmp_path / "rec.cvp")
    np.testing.assert_allclose(got.onset_s, spans.onset_s)
    np.testing.assert_allclose(got.duration_s, spans.duration_s)
    np.testing.assert_array_equal(got.channel, 1)


def test_fields_out_of_range_are_refused() -> None:
    columns = {name: np.array([1]) for name in ("tick", "code", "subtype", "chan", "num")} | {"text": np.array([""], dtype=object)}
    for name, value in (("chan", 256), ("num", 200), ("subtype", -129)):
        with pytest.raises(InputError, match=name):
            encode(columns | {name: np.array([value])}, 500.0)
    with pytest.raises(InputError, match="in order"):
        encode({k: np.repeat(v, 2) for k, v in columns.items()} | {"tick": np.array([2, 1])}, 500.0)


def test_bytes_that_are_no_annotation_file() -> None:
    for raw in (b"", b"\0", b"odd", b"time_s,mark\n1.0,a\n\n", bytes(range(2, 250))):
        with pytest.raises(FileError) as error:
            decode(raw, "x.atr")
        one_line(error)
