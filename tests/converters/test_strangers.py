"""Files from strangers: what is broken, hostile or odd is an error of one line, never a crash, a request, or memory by the gigabyte."""

from __future__ import annotations

import socket
import tracemalloc
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

import caval
from caval.api import read_track
from caval.errors import CavalError, FileError, InputError
from caval.recording import Recording
from caval.track import Track
from caval_edf.tal import decode as decode_tal
from caval_edf.tal import encode, spread
from caval_wfdb import read_annotations
from caval_wfdb.annotation import track_bytes
from caval_wfdb.codec import decode
from compliance import one_line, record


def header(folder: Path, name: str, *lines: str, samples: NDArray | range = range(0)) -> Path:
    """A WFDB header of hand-made lines, with 16-bit samples where there are any."""
    path = folder / f"{name}.hea"
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    if len(samples):
        (folder / f"{name}.dat").write_bytes(np.asarray(samples).astype("<i2").tobytes())
    return path


def refused(path: Path) -> str:
    with pytest.raises(FileError) as error:
        caval.read(path)
    return one_line(error)


@pytest.fixture
def no_network(monkeypatch: pytest.MonkeyPatch) -> list[object]:
    """Any attempt to look up or reach a host, noted and refused."""
    asked: list[object] = []

    def refuse(*words: object, **_: object) -> None:
        asked.append(words)
        raise OSError("no network in tests")

    for name in ("connect", "connect_ex"):
        monkeypatch.setattr(socket.socket, name, refuse)
    for name in ("getaddrinfo", "create_connection", "gethostbyname"):
        monkeypatch.setattr(socket, name, refuse)
    return asked


# names that lead elsewhere

ELSEWHERE = ["../secret.dat", "/etc/hostname", "..", "a/../../b.dat", "http://192.0.2.1/rec.dat", "s3://bucket/rec.dat", "C:\\rec.dat", "-"]


@pytest.mark.parametrize("name", ELSEWHERE)
@pytest.mark.parametrize("fmt", ["16", "212", "516"])
def test_signal_files_elsewhere_are_not_opened(tmp_path: Path, no_network: list[object], name: str, fmt: str) -> None:
    (tmp_path / "secret.dat").write_bytes(bytes(8))
    (tmp_path / "in").mkdir()
    said = refused(header(tmp_path / "in", "rec", "rec 1 125 4", f"{name} {fmt} 100/mmHg 16 0 0 0 0 CVP"))
    assert "only plain names" in said
    assert repr(name)[1:-1] in said
    assert not no_network


@pytest.mark.parametrize("name", ELSEWHERE)
def test_segments_elsewhere_are_not_opened(tmp_path: Path, no_network: list[object], name: str) -> None:
    assert "only plain names" in refused(header(tmp_path, "rec", "rec/2 1 125 8", "~ 4", f"{name} 4"))
    assert not no_network


@pytest.mark.parametrize("address", ["http://192.0.2.1/rec.hea", "https://192.0.2.1/rec", "http://192.0.2.1/rec.atr", "http://192.0.2.1/rec.edf"])
def test_addresses_are_no_files(no_network: list[object], address: str) -> None:
    for reader in (caval.read, read_track):
        with pytest.raises(FileError) as error:
            reader(address)
        one_line(error)
    assert not no_network


# sizes that nothing holds


@pytest.mark.parametrize("fmt", ["16", "212", "24", "80", "310", "508", "516"])
def test_nine_thousand_million_samples_declared(tmp_path: Path, fmt: str) -> None:
    path = header(tmp_path, "rec", "rec 1 125 9000000000", f"rec.dat {fmt} 100/mmHg 16 0 0 0 0 CVP", samples=range(4))
    tracemalloc.start()
    assert "truncated" in refused(path)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 50e6  # imports of a first call included; the samples would be 18 GB


def test_a_null_segment_of_nine_thousand_million_samples_is_not_laid_out(tmp_path: Path) -> None:
    header(tmp_path, "a", "a 1 100 4", "a.dat 16 100/mmHg 16 0 0 0 0 CVP", samples=range(4))
    got = caval.read(header(tmp_path, "rec", "rec/3 1 100 9000000008", "a 4", "~ 9000000000", "a 4"))
    channel = got.channels[0]
    assert channel.gaps.tolist() == [[4, 9_000_000_004]]
    np.testing.assert_array_equal(channel.digital(9_000_000_004), range(4))


def test_an_offset_beyond_the_end(tmp_path: Path) -> None:
    for length in ("", " 4"):
        path = header(tmp_path, "rec", f"rec 1 125{length}", "rec.dat 16+9999 100/mmHg 16 0 0 0 0 CVP", samples=range(4))
        assert "begin at byte 9999" in refused(path)


# segments


def test_segments_that_differ_in_their_number_of_signals(tmp_path: Path) -> None:
    header(tmp_path, "a", "a 2 100 2", *["a.dat 16 100/mmHg 16 0 0 0 0 CVP"] * 2, samples=range(4))
    header(tmp_path, "b", "b 1 100 2", "b.dat 16 100/mmHg 16 0 0 0 0 CVP", samples=range(2))
    for order in (("a 2", "b 2"), ("b 2", "a 2")):
        assert "number of signals" in refused(header(tmp_path, "rec", "rec/2 2 100 4", *order))


def test_a_layout_with_two_signals_of_one_name(tmp_path: Path) -> None:
    header(tmp_path, "layout", "layout 2 100 0", *["~ 0 100/mmHg 16 0 0 0 0 P"] * 2)
    header(tmp_path, "a", "a 2 100 2", *["a.dat 16 100/mmHg 16 0 0 0 0 P"] * 2, samples=range(4))
    header(tmp_path, "b", "b 1 100 2", "b.dat 16 100/mmHg 16 0 0 0 0 P", samples=range(2))
    first, second = caval.read(header(tmp_path, "rec", "rec/3 2 100 4", "layout 0", "a 2", "b 2")).channels
    np.testing.assert_array_equal(first.digital(), [0, 2, 0, 1])
    np.testing.assert_array_equal(second.digital(0, 2), [1, 3])
    assert second.gaps.tolist() == [[2, 4]]


@pytest.mark.parametrize(
    ("own", "word"), [("a 1 50 4", "50 Hz"), ("a 1 100 3", "has 3 samples"), ("a/1 1 100 4", "segments"), ("a 1 100 9", "truncated")]
)
def test_segments_that_do_not_fit(tmp_path: Path, own: str, word: str) -> None:
    header(tmp_path, "a", own, "a.dat 16 100/mmHg 16 0 0 0 0 CVP", samples=range(4))
    assert word in refused(header(tmp_path, "rec", "rec/1 1 100 4", "a 4"))


def test_a_declared_length_that_is_not_the_sum_of_the_segments(tmp_path: Path) -> None:
    header(tmp_path, "a", "a 1 100 4", "a.dat 16 100/mmHg 16 0 0 0 0 CVP", samples=range(4))
    assert "its segments have 8" in refused(header(tmp_path, "rec", "rec/2 1 100 9", "a 4", "a 4"))


# header lines


@pytest.mark.parametrize(
    ("field", "unit"),
    [("100/mm Hg 16 0 0 0 0 CVP", "mmHg"), ("100/cm H2O 16 0 0 0 0 CVP", "cmH2O"), ("100/l per min 16 0 0 0 0 CVP", "l per min"),
     ("100/mm Hg", "mm"), ("100/mmHg", "mmHg"), ("100(-3)/mmHg 12", "mmHg"), ("100", "mV"), ("0/mmHg 16 0 0 0 0 CVP", "mmHg")],
)
def test_units_with_blanks(tmp_path: Path, field: str, unit: str) -> None:
    """A unit with a blank is told from the resolution that follows it; without one there is no telling, and the line is refused."""
    path = header(tmp_path, "rec", "rec 1 125 4", f"rec.dat 16 {field}", samples=range(4))
    if unit == "mm":
        assert "describes no signal" in refused(path)
    else:
        assert caval.read(path).channels[0].unit == unit


def test_a_label_with_a_line_break_makes_no_header_line(tmp_path: Path) -> None:
    sent = Recording.from_arrays({"CVP\nrec.dat 16": (np.zeros(8), 125.0, "mmHg")}, name="rec")
    caval.write(sent, tmp_path / "rec.hea")
    assert len(caval.read(tmp_path / "rec.hea").channels) == 1
    with pytest.raises(InputError, match="rename it first") as error:
        caval.write(sent, tmp_path / "rec.edf")
    one_line(error)


@pytest.mark.parametrize("label", ["EDF Annotations", "BDF Annotations"])
@pytest.mark.parametrize("ending", [".edf", ".bdf"])
def test_a_signal_named_like_annotations_is_refused(tmp_path: Path, label: str, ending: str) -> None:
    """It would come back as no channel at all."""
    sent = Recording.from_arrays({label: (np.zeros(8), 125.0, "mmHg")}, name="rec")
    with pytest.raises(InputError, match="rename it first") as error:
        caval.write(sent, tmp_path / f"rec{ending}")
    one_line(error)


# annotation files


@pytest.mark.parametrize("words", [b"\0\0garbage!", b"MATLAB 5.0 MAT-file, Platform: x " + b"\0\0" * 8 + b"\x01\x02"])
def test_what_follows_the_end_mark_shows_another_kind_of_file(tmp_path: Path, words: bytes) -> None:
    with pytest.raises(FileError, match="no annotation file") as error:
        decode(words, "rec.mat")
    one_line(error)
    caval.write(record(), tmp_path / "rec.hea")
    (tmp_path / "rec.mat").write_bytes(words)
    got = caval.read(tmp_path / "rec.hea")
    assert not got.tracks
    assert "rec.mat" in got.notes[0]


def test_zeros_that_fill_a_block_may_follow_the_end_mark() -> None:
    raw = track_bytes(Track.build([1.0], ["CVP/a"]), 500.0)
    assert decode(raw + bytes(512), "rec.atr")[0]["tick"].tolist() == [500]


@pytest.mark.parametrize("stated", ["1.2.3", "-5", "fast", "", "0", "1e999"])
def test_a_time_resolution_that_is_no_number(tmp_path: Path, stated: str) -> None:
    """The record's own frame rate stands in."""
    header(tmp_path, "rec", "rec 1 125 4", "rec.dat 16 100/mmHg 16 0 0 0 0 CVP", samples=range(4))
    note = f"## time resolution: {stated}".encode()
    head = b"\x00\x58" + (63 << 10 | len(note)).to_bytes(2, "little") + note + b"\0" * (len(note) % 2)
    (tmp_path / "rec.atr").write_bytes(head + (1 << 10 | 250).to_bytes(2, "little") + b"\0\0")
    np.testing.assert_array_equal(read_annotations(tmp_path / "rec.atr").onset_s, [2.0])


def test_an_annotation_file_that_is_missing(tmp_path: Path) -> None:
    with pytest.raises(FileError, match="no such file") as error:
        read_annotations(tmp_path / "rec.atr")
    one_line(error)


@pytest.mark.parametrize("seconds", [b"nan", b"+inf", b"1e999", b"noon", b""])
def test_edf_annotations_at_no_time(seconds: bytes) -> None:
    for tal in (seconds + b"\x14x\x14\x00", b"+1\x15" + (seconds or b"-") + b"\x14x\x14\x00"):
        with pytest.raises(FileError, match="no time") as error:
            decode_tal([b"+0\x14\x14\x00" + tal], "rec.edf")
        one_line(error)


def test_a_gap_that_a_stranger_noted_beyond_the_record(tmp_path: Path) -> None:
    """The text is ours; the times are not."""
    noted = Track.build([-3.0, 6.0, 20.0], ["BAD_CVP/missing"] * 3, duration_s=[2.0, 100.0, 1.0])
    caval.write(record().with_track("annotations", noted), tmp_path / "rec.edf")
    channel = caval.read(tmp_path / "rec.edf").channel("CVP")
    assert np.flatnonzero(np.isnan(channel.physical())).tolist() == list(range(750, 1000))
    assert channel.gaps.min() >= 0
    assert channel.gaps.max() <= channel.n_samples


def test_what_a_stage_says_of_a_channel_takes_no_samples_away(tmp_path: Path) -> None:
    """Spans are named by role: BAD_CVP/gap may speak of a channel P2, beside another that is called CVP."""
    said = Track.build([1.0], ["BAD_CVP/gap"], duration_s=[2.0], channel=2)
    caval.write(record().with_track("annotations", said), tmp_path / "rec.edf")
    got = caval.read(tmp_path / "rec.edf")
    assert not np.isnan(got.read("CVP")).any()
    assert list(got.annotations.text) == ["BAD_CVP/gap"]


# capacity of EDF+ annotations


@pytest.mark.parametrize(("n_records", "home"), [(10_000, 9_999), (10_000, 0), (10_000, 5_000), (1, 0), (7, 6)])
def test_a_crowd_of_annotations_does_not_make_every_record_long(n_records: int, home: int) -> None:
    """5,000 in one record: the size of all records comes from the mean, wherever the crowd is."""
    stamps = [encode(float(k), 0.0, "") for k in range(n_records)]
    tals = [encode(home + 1e-4 * k, 0.0, "CVP/a") for k in range(5000)]
    laid, room = spread(stamps, tals, np.full(5000, home))
    mean = sum(map(len, tals)) / n_records
    assert room <= 1.1 * mean + 1 + max(map(len, tals)) + max(map(len, stamps))
    assert max(map(len, laid)) <= room
    assert b"".join(part[len(stamp) :] for part, stamp in zip(laid, stamps, strict=True)) == b"".join(tals)


def test_annotations_of_any_length_are_laid_in_order() -> None:
    rng = np.random.default_rng(11)
    for _ in range(100):
        n_records, n = int(rng.integers(1, 30)), int(rng.integers(0, 80))
        stamps = [encode(float(k), 0.0, "") for k in range(n_records)]
        tals = [encode(float(k), 0.0, "x" * int(rng.integers(0, 40))) for k in range(n)]
        laid, room = spread(stamps, tals, np.sort(rng.integers(0, n_records, n)))
        assert b"".join(part[len(stamp) :] for part, stamp in zip(laid, stamps, strict=True)) == b"".join(tals)
        assert max(map(len, laid)) <= room


# bytes at random


@pytest.mark.parametrize("kind", ["edf", "hea", "atr"])
def test_random_damage_is_a_caval_error_or_a_reading(tmp_path: Path, kind: str) -> None:
    rng = np.random.default_rng(3)
    notes = Track.build([0.5, 1.0, 2.0], ["CVP/a", "BAD_CVP/flat", "x"], duration_s=[0.0, 0.5, 0.0])
    caval.write(record(duration_s=2.0).with_track("annotations", notes), tmp_path / ("rec.edf" if kind == "edf" else "rec.hea"))
    path = tmp_path / f"rec.{kind}"
    whole, said = path.read_bytes(), []
    for _ in range(150):
        raw = bytearray(whole)
        if rng.random() < 0.3:
            raw = raw[: int(rng.integers(0, len(raw)))]
        for _ in range(int(rng.integers(1, 6))):
            if raw:
                raw[int(rng.integers(0, min(len(raw), 1600)))] = int(rng.integers(0, 256))
        path.write_bytes(bytes(raw))
        try:
            if kind == "atr":
                read_track(path)
            else:
                for channel in caval.read(path).channels:
                    channel.physical(0, min(channel.n_samples, 50))
        except CavalError as error:
            said.append(str(error))
    assert said
    assert not any("\n" in line for line in said)
