"""WFDB: the compliance suite, header(5), signal(5), multi-segment records, and the traps of other readers."""

from __future__ import annotations

from dataclasses import replace
from datetime import datetime
from pathlib import Path

import numpy as np
import pytest
import wfdb
from numpy.typing import NDArray

import caval
from caval.errors import FileError, InputError
from caval.model.sketch import sketch
from caval.recording import Calibration, Recording, Signal
from caval.track import Track
from caval_wfdb.detectors import xqrs
from compliance import STEPS, FormatCompliance, Seen, one_line, record


def by_wfdb_package(path: Path) -> Seen:
    name = str(path.with_suffix(""))
    digital, physical = (wfdb.rdrecord(name, physical=p, smooth_frames=False) for p in (False, True))
    notes = Track.empty()
    if path.with_suffix(".atr").exists():
        read = wfdb.rdann(name, "atr")
        begun, onset, text, lasts = {}, [], [], []
        for at, word in zip(read.sample / read.fs, read.aux_note, strict=True):
            if word.endswith(" end"):
                lasts[begun[word.removesuffix(" end")]] = at - onset[begun[word.removesuffix(" end")]]
                continue
            begun[word.removesuffix(" begin")] = len(onset)
            onset.append(at)
            text.append(word.removesuffix(" begin"))
            lasts.append(0.0)
        notes = Track.build(onset, text, duration_s=lasts)
    values = {name: v for name, v in zip(physical.sig_name, physical.e_p_signal, strict=True)}
    return Seen(values, notes, dict(zip(digital.sig_name, digital.e_d_signal, strict=True)), time_error_s=0.5 / 500)


class TestWfdb(FormatCompliance):
    suffix = ".hea"
    others = (by_wfdb_package,)
    texts = ("Blutdruck fällt", "5 µg/kg", "é")
    refused_texts = ("5 cmH₂O PEEP", "ciśnienie", "中心静脉压", "Ã¤", "a\x00")
    samples_file = ".dat"
    time_step_s = 1 / 500


def write(tmp_path: Path, recording: Recording, name: str = "rec") -> Path:
    path = tmp_path / f"{name}.hea"
    caval.write(recording, path)
    return path


def by_wfdb(path: Path) -> list[NDArray]:
    return wfdb.rdrecord(str(path.with_suffix("")), physical=False, smooth_frames=False).e_d_signal


def header(tmp_path: Path, *lines: str, samples: NDArray | None = None, encoding: str = "utf-8") -> Path:
    """A record of hand-made header lines, with 16-bit samples."""
    path = tmp_path / "rec.hea"
    path.write_bytes("\n".join(lines).encode(encoding) + b"\n")
    if samples is not None:
        (tmp_path / "rec.dat").write_bytes(samples.astype("<i2").tobytes())
    return path


# header(5)


def test_record_line_and_signal_lines_of_a_record_at_two_rates(tmp_path: Path) -> None:
    """500 and 125 Hz become frames at 125 Hz, as in records from other laboratories."""
    path = write(tmp_path, sketch(minutes=0.5, events=False).recording)
    lines = path.read_text().splitlines()
    assert lines[0] == "rec 3 125 3750"
    assert [line.split()[:3] for line in lines[1:4]] == [
        ["rec.dat", "16x4", "1000(0)/mV"], ["rec.dat", "16", "100(0)/mmHg"], ["rec.dat", "16", "100(0)/mmHg"],
    ]
    assert wfdb.rdheader(str(path.with_suffix(""))).sig_name == ["ECG II", "CVP", "ABP"]


def test_initial_values_and_checksums(tmp_path: Path) -> None:
    path = write(tmp_path, record())
    read = wfdb.rdrecord(str(path.with_suffix("")), physical=False, smooth_frames=False)
    for line, values, first in zip(path.read_text().splitlines()[1:], read.e_d_signal, read.init_value, strict=False):
        assert (int(line.split()[6]) - int(values.sum())) % 65536 == 0
        assert first == values[0]


def test_a_record_of_wfdb_is_copied_to_the_letter(tmp_path: Path) -> None:
    """Gain, baseline, zero, comments and samples of a record that wfdb wrote."""
    rng = np.random.default_rng(0)
    samples = rng.integers(-2047, 2047, (1000, 2))
    wfdb.wrsamp(
        "src", fs=250, units=["mV", "mmHg"], sig_name=["MLII", "CVP"], d_signal=samples, fmt=["212", "212"], adc_gain=[200.0, 81.92],
        baseline=[-17, 1024], comments=["age: 63", "line re-zeroed at 10:15"], base_time=datetime(2020, 1, 2, 3, 4, 5, 250000).time(),
        base_date=datetime(2020, 1, 2).date(), write_dir=str(tmp_path),
    )
    got = caval.read(tmp_path / "src")
    assert got.start_time == datetime(2020, 1, 2, 3, 4, 5, 250000)
    for i, channel in enumerate(got.channels):
        np.testing.assert_array_equal(channel.digital(), samples[:, i])
    np.testing.assert_allclose(got.read("CVP"), (samples[:, 1] - 1024) / 81.92, rtol=1e-12)
    path = write(tmp_path, got, "copy")
    a, b = (wfdb.rdrecord(str(tmp_path / name), physical=False) for name in ("src", "copy"))
    np.testing.assert_array_equal(a.d_signal, b.d_signal)
    for name in ("fmt", "adc_gain", "baseline", "units", "sig_name", "fs", "sig_len", "base_time", "base_date"):
        assert getattr(b, name) == getattr(a, name), name
    assert [c for c in b.comments if not c.startswith("caval ")] == a.comments
    assert not path.read_text().count("caval ")  # nothing had to be kept


@pytest.mark.parametrize("encoding", ["utf-8", "latin-1"])
def test_blanks_in_units_and_text_outside_ascii(tmp_path: Path, encoding: str) -> None:
    """wfdb reads the unit "mm" and a label "Hg 16 0 …" from the first, and "V" from the second."""
    lines = ("rec 2 125 4", "rec.dat 16 100(0)/mm Hg 16 0 1 0 0 CVP", "rec.dat 16 1000/µV 16 0 1 0 0 EEG Stirn-Öhr")
    got = caval.read(header(tmp_path, *lines, samples=np.arange(8), encoding=encoding))
    assert [(c.label, c.unit) for c in got.channels] == [("CVP", "mmHg"), ("EEG Stirn-Öhr", "µV")]


def test_defaults_of_what_a_header_leaves_out(tmp_path: Path) -> None:
    got = caval.read(header(tmp_path, "# a comment first", "rec 2", "rec.dat 16", "rec.dat 16 0 12 512", samples=np.arange(20)))
    assert [c.sampling_rate for c in got.channels] == [250.0, 250.0]
    assert [c.n_samples for c in got.channels] == [10, 10]
    assert len(got.notes) == 2
    assert "no calibration" in got.notes[0]
    np.testing.assert_allclose(got.channels[0].physical(), np.arange(0, 20, 2) / 200)
    np.testing.assert_allclose(got.channels[1].physical(), (np.arange(1, 20, 2) - 512) / 200)


def test_a_time_without_a_date_is_noted(tmp_path: Path) -> None:
    got = caval.read(header(tmp_path, "rec 1 125 4 10:20:30", "rec.dat 16 100/mmHg 16 0 0 0 0 CVP", samples=np.arange(4)))
    assert got.start_time is None
    assert "10:20:30" in got.notes[0]


@pytest.mark.parametrize(
    ("words", "start"),
    [("10:20:30.25 01/02/2020", datetime(2020, 2, 1, 10, 20, 30, 250000)), ("20:30 1/2/2020", datetime(2020, 2, 1, 0, 20, 30)),
     ("5 01/02/2020", datetime(2020, 2, 1, 0, 0, 5)), ("10:20:59.9999999 01/02/2020", datetime(2020, 2, 1, 10, 20, 59, 999999)),
     ("24:00:00 01/02/2020", None), ("10:20:30 02/30/2020", None)],
)
def test_start_times_as_header_5_spells_them(tmp_path: Path, words: str, start: datetime | None) -> None:
    got = caval.read(header(tmp_path, f"rec 1 125 4 {words}", "rec.dat 16 100/mmHg 16 0 0 0 0 CVP", samples=np.arange(4)))
    assert got.start_time == start
    assert len(got.notes) == (start is None)


def test_skew_moves_the_channel_and_comes_back(tmp_path: Path) -> None:
    lines = ("rec 2 100 50", "rec.dat 16:5 100/mmHg 16 0 0 0 0 CVP", "rec.dat 16x2 100/mV 16 0 0 0 0 ECG")
    path = header(tmp_path, *lines, samples=np.arange(150))
    got = caval.read(path)
    assert [c.start_s for c in got.channels] == [-0.05, 0.0]
    at_zero = wfdb.rdrecord(str(path.with_suffix("")), physical=False, smooth_frames=False).e_d_signal[0]
    np.testing.assert_array_equal(got.channels[0].digital(5), at_zero[:45])
    np.testing.assert_allclose(got.channels[0].signal(0.0).values, at_zero[:45] / 100)
    again = caval.read(write(tmp_path, got, "again"))
    assert [c.start_s for c in again.channels] == [-0.05, 0.0]
    np.testing.assert_array_equal(again.channels[0].digital(), got.channels[0].digital())
    late = replace(got, channels=(replace(got.channels[0], start_s=0.033), got.channels[1]))
    with pytest.raises(InputError, match=r"begins at 0\.033 s") as error:
        caval.write(late, tmp_path / "late.hea")
    one_line(error)


@pytest.mark.parametrize(
    ("lines", "word"),
    [
        (("rec 1 125 4", "../rec.dat 16 100/mmHg"), "plain names"),
        (("rec 1 125 4", "http://host/rec.dat 16 100/mmHg"), "plain names"),
        (("rec 1 125 4", "none.dat 16 100/mmHg"), "not beside it"),
        (("rec 1 125 9000000000", "rec.dat 16 100/mmHg"), "truncated"),
        (("rec 1 -125 4", "rec.dat 16 100/mmHg"), "cannot all be right"),
        (("rec 2 125 4", "rec.dat 16 100/mmHg"), "declares 2 signals"),
        (("rec 1 125 4", "rec.dat 99 100/mmHg"), "format 99"),
        (("rec 1 125 4", "rec.dat 16x0 100/mmHg"), "no sample"),
        (("rec 1 125 4", "rec.dat sixteen 100/mmHg"), "describes no signal"),
        (("rec/1 1 125 4", "rec 4"), "segments"),
        (("rec/2 1 125 8", "../a 4", "b 4"), "plain names"),
        (("rec/2 1 125 8", "a 4", "b 4"), "no such file"),
    ],
)
def test_headers_that_cannot_be_right(tmp_path: Path, lines: tuple[str, ...], word: str) -> None:
    path = header(tmp_path, *lines, samples=np.arange(4))
    with pytest.raises(FileError, match=word) as error:
        caval.read(path)
    one_line(error)


def test_record_names_of_wfdb(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="give the output another name") as error:
        caval.write(record(), tmp_path / "bed 4.hea")
    one_line(error)
    assert not list(tmp_path.iterdir())


def test_a_record_by_its_name(tmp_path: Path) -> None:
    write(tmp_path, record())
    assert caval.read(tmp_path / "rec").labels == record().labels


def test_calibrations_that_gain_and_baseline_cannot_hold_come_back_exactly(tmp_path: Path) -> None:
    """An EDF line of ±100 mmHg over 16 bits needs a baseline of −0.5."""
    limits = Calibration(-32768, 32767, -100.0, 100.0)
    sent = Recording.from_arrays({"CVP": (np.arange(125, dtype=np.int16), 125.0, "mmHg")}, name="rec", calibrations={"CVP": limits})
    got = caval.read(write(tmp_path, sent))
    assert got.channels[0].calibration == limits
    theirs = wfdb.rdrecord(str(tmp_path / "rec")).p_signal[:, 0]
    np.testing.assert_allclose(theirs, sent.read("CVP"), rtol=0, atol=0.51 * limits.scale)


def test_units_that_other_readers_cannot_take_come_back(tmp_path: Path) -> None:
    units = ["µV", "cmH₂O", "mm Hg", "", "°C", "%"]
    sent = Recording.from_arrays({f"c{i}": (np.zeros(10), 10.0, u) for i, u in enumerate(units)}, name="rec")
    path = write(tmp_path, sent)
    assert [c.unit for c in caval.read(path).channels] == units
    assert wfdb.rdheader(str(path.with_suffix(""))).units == ["uV", "cmH2O", "mmHg", "NU", "degC", "%"]


def test_a_gain_that_was_mended_by_hand_wins_over_our_comment(tmp_path: Path) -> None:
    limits = Calibration(-32768, 32767, -100.0, 100.0)
    sent = Recording.from_arrays({"CVP": (np.arange(125, dtype=np.int16), 125.0, "mmHg")}, name="rec", calibrations={"CVP": limits})
    path = write(tmp_path, sent)
    text = path.read_text()
    path.write_text(text.replace(text.split()[6], "50(0)/mmHg"))
    np.testing.assert_allclose(caval.read(path).read("CVP"), np.arange(125) / 50)


def test_an_edited_comment_of_ours_is_no_reason_to_fail(tmp_path: Path) -> None:
    path = write(tmp_path, record())
    edits = ("1 limits none", "99 label x", "0 limits 5 5 1 1", "2 limits 0 1 nan inf", "³ n_samples 3", "", "0 n_samples ten")
    path.write_text(path.read_text() + "".join(f"# caval {edit}\n" for edit in edits))
    got = caval.read(path)
    np.testing.assert_array_equal(got.channels[1].digital(), record().channels[1].digital())


# signal(5)


@pytest.mark.parametrize("fmt", ["80", "212", "16", "24", "32", "508", "516", "524"])
def test_formats_that_wfdb_writes(tmp_path: Path, fmt: str) -> None:
    if fmt.startswith("5"):
        pytest.importorskip("soundfile")
    bits = {"80": 8, "508": 8, "212": 12, "24": 24, "524": 24}.get(fmt, 16)
    half = 2 ** (bits - 1)
    samples = np.random.default_rng(1).integers(-half, half, (4001, 1))
    samples[7] = -half  # the missing code
    wfdb.wrsamp(
        "src", fs=100, units=["mmHg"], sig_name=["CVP"], d_signal=samples, fmt=[fmt], adc_gain=[100.0], baseline=[0],
        write_dir=str(tmp_path),
    )
    got = caval.read(tmp_path / "src")
    channel = got.channels[0]
    missing = samples[:, 0] == (-half if fmt != "32" else -(2**31))
    np.testing.assert_array_equal(channel.digital()[~missing], samples[~missing, 0])
    np.testing.assert_array_equal(np.isnan(channel.physical()), missing)
    for start, stop in ((0, 1), (1, 2), (1999, 3001), (4000, 4001), (9, 9)):
        np.testing.assert_array_equal(channel.digital(start, stop), channel.digital()[start:stop])
    again = caval.read(write(tmp_path, got, "again"))
    np.testing.assert_array_equal(again.channels[0].physical(), channel.physical())


@pytest.mark.parametrize("shape", [("8", "8"), ("8x3", "8")])
def test_first_differences_of_format_8(tmp_path: Path, shape: tuple[str, str]) -> None:
    """Packed by hand from signal(5). Of a part of such a record wfdb sums from the part's beginning; the whole it reads right."""
    widths = [int(word[2:] or 1) for word in shape]
    steps = np.random.default_rng(6).integers(-100, 100, (101, sum(widths)))
    (tmp_path / "rec.dat").write_bytes(steps.astype("i1").tobytes())
    lines = (f"rec.dat {word} 100/mmHg 16 0 {first} 0 0 P" for word, first in zip(shape, (50, -7), strict=True))
    path = header(tmp_path, "rec 2 100 101", *lines)
    for channel, theirs, first, column in zip(
        caval.read(path).channels, by_wfdb(path), (50, -7), np.split(steps, widths[:1], axis=1), strict=True
    ):
        values = first + np.cumsum(column.reshape(-1))
        np.testing.assert_array_equal(channel.digital(), values)
        np.testing.assert_array_equal(theirs, values)
        for start, stop in ((0, 1), (1, 2), (40, 60), (100, 101), (7, 7)):
            np.testing.assert_array_equal(channel.digital(start, stop), values[start:stop])


@pytest.mark.parametrize("fmt", ["212", "24", "80", "160", "310", "311"])
def test_parts_of_a_frame_of_several_samples(tmp_path: Path, fmt: str) -> None:
    """An odd number of frames of 3 + 1 samples, any bytes, against wfdb's reading of the whole."""
    (tmp_path / "rec.dat").write_bytes(np.random.default_rng(8).integers(0, 256, 1700, dtype=np.uint8).tobytes())
    path = header(tmp_path, "rec 2 100 101", f"rec.dat {fmt}x3 100/mmHg 16 0 0 0 0 CVP", f"rec.dat {fmt} 100/mmHg 16 0 0 0 0 P")
    for channel, whole in zip(caval.read(path).channels, by_wfdb(path), strict=True):
        np.testing.assert_array_equal(channel.digital(), whole)
        for start, stop in ((0, 1), (1, 2), (7, 50), (33, 101), (100, 101)):
            np.testing.assert_array_equal(channel.digital(start, stop), whole[start:stop])


@pytest.mark.parametrize("fmt", ["61", "160", "310", "311"])
def test_formats_that_wfdb_only_reads(tmp_path: Path, fmt: str) -> None:
    """Packed by hand from signal(5)."""
    values = np.random.default_rng(2).integers(-500, 500, 300)
    if fmt == "61":
        raw = values.astype(">i2").tobytes()
    elif fmt == "160":
        raw = (values + 32768).astype("<u2").tobytes()
    elif fmt == "310":
        a, b, c = (values[i::3] & 0x3FF for i in range(3))
        words = np.stack([(a << 1) | ((c & 0x1F) << 11), (b << 1) | ((c >> 5) << 11)], axis=1)
        raw = words.astype("<u2").tobytes()
    else:
        a, b, c = (values[i::3] & 0x3FF for i in range(3))
        raw = (a | (b << 10) | (c << 20)).astype("<u4").tobytes()
    (tmp_path / "rec.dat").write_bytes(raw)
    path = header(tmp_path, "rec 1 100 300", f"rec.dat {fmt} 100/mmHg 16 0 0 0 0 CVP")
    channel = caval.read(path).channels[0]
    np.testing.assert_array_equal(channel.digital(), values)
    np.testing.assert_array_equal(channel.digital(100, 200), values[100:200])


def test_two_signal_files_and_a_byte_offset(tmp_path: Path) -> None:
    (tmp_path / "b.dat").write_bytes(b"PREAMBLE" + np.arange(100, 110).astype("<i2").tobytes())
    path = header(
        tmp_path, "rec 3 100 10", "rec.dat 16 100/mmHg 16 0 0 0 0 CVP", "b.dat 16+8 100/mmHg 16 0 0 0 0 ABP",
        "rec.dat 16 100/mmHg 16 0 0 0 0 PAP", samples=np.arange(20),
    )
    got = caval.read(path)
    assert [c.digital().tolist()[:2] for c in got.channels] == [[0, 2], [100, 101], [1, 3]]
    assert {p.name for p in got.files} == {"rec.hea", "rec.dat", "b.dat"}


def test_rails_are_counted_beside_gaps(tmp_path: Path) -> None:
    """Both in one channel: what is a value stays one, what is a gap stays one."""
    values = np.full(500, -32768, dtype=np.int16)
    values[100:] = 5
    whole = Calibration(-32768, 32767, -327.68, 327.67)
    sent = Recording.from_arrays({"CVP": (values, 125.0, "mmHg")}, name="rec", calibrations={"CVP": whole})
    sent = replace(sent, channels=(replace(sent.channels[0], gaps=np.array([[200, 300]])),))
    path = write(tmp_path, sent)
    assert "100 samples of -32768 are values, not missing" in path.read_text()
    np.testing.assert_array_equal(caval.read(path).read("CVP"), sent.read("CVP"))


# multi-segment records


def _segment(tmp_path: Path, name: str, values: NDArray, labels: tuple[str, ...], gain: float = 100.0) -> None:
    wfdb.wrsamp(
        name, fs=100, units=["mmHg"] * len(labels), sig_name=list(labels), d_signal=values, fmt=["16"] * len(labels),
        adc_gain=[gain] * len(labels), baseline=[0] * len(labels), write_dir=str(tmp_path),
    )


def test_null_segments_of_a_fixed_layout_are_gaps(tmp_path: Path) -> None:
    """wfdb itself fails on these."""
    parts = [np.arange(200).reshape(100, 2), np.arange(1000, 1100).reshape(50, 2)]
    for name, part in zip(("s1", "s2"), parts, strict=True):
        _segment(tmp_path, name, part, ("CVP", "ABP"))
    path = header(tmp_path, "rec/3 2 100 180", "s1 100", "~ 30", "s2 50")
    got = caval.read(path)
    assert got.channels[0].gaps.tolist() == [[100, 130]]
    np.testing.assert_array_equal(got.channels[1].digital(0, 100), parts[0][:, 1])
    np.testing.assert_array_equal(got.channels[1].digital(130, 180), parts[1][:, 1])
    assert np.isnan(got.read("CVP", 1.0, 1.3)).all()
    assert {p.name for p in got.files} == {"rec.hea", "s1.hea", "s1.dat", "s2.hea", "s2.dat"}
    again = caval.read(write(tmp_path, got, "again"))
    np.testing.assert_array_equal(again.read("CVP"), got.read("CVP"))


def test_signals_that_come_and_go_in_a_variable_layout(tmp_path: Path) -> None:
    _segment(tmp_path, "s1", np.arange(100).reshape(100, 1), ("CVP",))
    _segment(tmp_path, "s2", np.arange(200).reshape(100, 2), ("ABP", "CVP"), gain=50.0)
    (tmp_path / "layout.hea").write_text("layout 2 100 0\n~ 0 100/mmHg 16 0 0 0 0 CVP\n~ 0 100/mmHg 16 0 0 0 0 ABP\n")
    got = caval.read(header(tmp_path, "rec/3 2 100 200", "layout 0", "s1 100", "s2 100"))
    np.testing.assert_allclose(got.read("CVP"), np.r_[np.arange(100) / 100, np.arange(1, 200, 2) / 50])
    assert got.channel("ABP").gaps.tolist() == [[0, 100]]
    theirs = wfdb.rdrecord(str(tmp_path / "rec")).p_signal
    np.testing.assert_allclose(np.stack([got.read("CVP"), got.read("ABP")], axis=1), theirs)


def test_segments_are_not_made_of_segments(tmp_path: Path) -> None:
    path = header(tmp_path, "rec/2 1 100 8", "rec 4", "rec 4")
    with pytest.raises(FileError, match="made of segments") as error:
        caval.read(path)
    one_line(error)


# the detector


def test_xqrs_finds_the_beats_of_a_drawn_record() -> None:
    drawn = sketch(minutes=0.5, events=False)
    found = xqrs(drawn.recording.channel("ECG II").signal(5.0))
    truth = drawn.r_times_s[(drawn.r_times_s > 8) & (drawn.r_times_s < 29.5)]
    assert all(np.abs(found - r).min() < 0.05 for r in truth)
    assert len(found[found > 8]) <= len(truth) + 1


@pytest.mark.parametrize("kind", ["empty", "short", "flat", "missing", "half missing", "steps", "noise", "slow"])
def test_xqrs_on_what_is_no_ecg(kind: str, capsys: pytest.CaptureFixture[str]) -> None:
    rng = np.random.default_rng(0)
    n, rate = 5000, 250.0
    values = {
        "empty": np.empty(0), "short": rng.standard_normal(400), "flat": np.full(n, 0.7), "missing": np.full(n, np.nan),
        "half missing": np.r_[np.full(n // 2 + 1, np.nan), rng.standard_normal(n // 2)], "steps": np.repeat([0.0, 1.0], n // 2),
        "noise": rng.standard_normal(n), "slow": rng.standard_normal(n),
    }[kind]
    found = xqrs(Signal(values, 25.0 if kind == "slow" else rate, start_s=100.0))
    assert found.dtype == np.float64
    assert ((found >= 100.0) & (found < 100.0 + len(values) / rate)).all()
    if kind not in ("noise", "steps"):
        assert not len(found)
    assert capsys.readouterr().out == ""


def test_steps_come_from_the_suite() -> None:
    assert STEPS.scale == pytest.approx(0.01)
