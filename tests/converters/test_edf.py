"""EDF, EDF+, BDF: the compliance suite, and the clauses of the specification."""

from __future__ import annotations

import warnings
from dataclasses import replace
from datetime import datetime
from pathlib import Path

import numpy as np
import pytest

import caval
from caval.errors import FileError, InputError
from caval.recording import Calibration, Recording
from caval.track import Track
from caval_edf import read_annotations, write_marked
from caval_edf.header import number_field
from caval_edf.tal import decode, encode, spread
from compliance import START, STEPS, FormatCompliance, Seen, one_line, record, same_annotations, track


def by_pyedflib(path: Path) -> Seen:
    import pyedflib

    with pyedflib.EdfReader(str(path)) as reader:
        labels = reader.getSignalLabels()
        digital, physical = ({label: reader.readSignal(i, digital=d) for i, label in enumerate(labels)} for d in (True, False))
        onset, duration, text = reader.readAnnotations()
    lasts = np.array([max(0.0, float(d)) for d in duration])
    return Seen(physical, Track.build(onset, list(text), duration_s=lasts), digital, time_error_s=1e-4)


def by_edfio(path: Path) -> Seen:
    import edfio

    read = edfio.read_bdf(path) if path.suffix == ".bdf" else edfio.read_edf(path)
    notes = read.annotations
    track_ = Track.build([n.onset for n in notes], [n.text for n in notes], duration_s=[n.duration or 0.0 for n in notes])
    return Seen({s.label: s.data for s in read.signals}, track_, {s.label: s.digital for s in read.signals})


def by_mne(path: Path) -> Seen:
    import mne

    reader = mne.io.read_raw_bdf if path.suffix == ".bdf" else mne.io.read_raw_edf
    physical = {}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # MNE on units it does not know
        for channel in caval.read(path).channels:  # one at a time, or MNE resamples all to one rate
            volts = {"mV": 1e3, "uV": 1e6}.get(channel.unit, 1.0)
            raw = reader(path, include=[channel.label], preload=True, verbose="error")
            physical[channel.label] = raw.get_data()[0] * volts
    notes = raw.annotations
    return Seen(physical, Track.build(notes.onset, list(notes.description), duration_s=notes.duration), time_error_s=1e-6)


class TestEdf(FormatCompliance):
    suffix = ".edf"
    others = (by_pyedflib, by_edfio, by_mne)
    refused_texts = ("a\x14b", "a\x00", "\x15")
    time_step_s = 1e-9


class TestBdf(TestEdf):
    suffix = ".bdf"

    def test_integers_of_24_bits(self, path: Path) -> None:
        values = np.array([-(2**23), -1, 0, 1, 2**23 - 1] * 200, dtype=np.int32)
        limits = Calibration(-(2**23), 2**23 - 1, -327.68, 327.67)
        sent = Recording.from_arrays({"CVP": (values, 125.0, "mmHg")}, name="rec", calibrations={"CVP": limits})
        np.testing.assert_array_equal(self.trip(sent, path).channel("CVP").digital(), values)
        np.testing.assert_array_equal(by_edfio(path).digital["CVP"], values)
        with pytest.raises(InputError, match=r"write \.bdf instead"):
            caval.write(sent, path.with_suffix(".edf"))


def write(tmp_path: Path, recording: Recording, name: str = "rec.edf") -> Path:
    path = tmp_path / name
    caval.write(recording, path)
    return path


def patch(path: Path, offset: int, text: str, width: int) -> Path:
    """The file with one header field replaced."""
    raw = bytearray(path.read_bytes())
    raw[offset : offset + width] = text.encode("latin-1").ljust(width)[:width]
    path.write_bytes(bytes(raw))
    return path


def signal_field(path: Path, widths_before: int, width: int, number: int) -> int:
    """Offset of a signal's field: `widths_before` is the sum of the widths of the fields before it."""
    n_signals = int(path.read_bytes()[252:256])
    return 256 + widths_before * n_signals + width * number


PHYSICAL_MIN = 16 + 80 + 8


# 2.1: the header record


def test_2_1_header_text_travels_as_it_is(tmp_path: Path) -> None:
    """Limits keep their spelling (−5.000 is not rewritten as −5), and so do the patient, recording and reserved fields."""
    path = write(tmp_path, record())
    patch(path, 8, "MCH-0234567 F 02-MAY-1951 Haagse_Harry", 80)
    patch(path, signal_field(path, PHYSICAL_MIN, 8, 1), "-327.670", 8)
    patch(path, 88, "Startdate 29-FEB-2024 EMG561 BK/JOP Sony. MNC R Median Nerve.", 80)
    again = write(tmp_path, caval.read(path), "again.edf")
    assert again.read_bytes() == path.read_bytes()


def test_2_1_fields_of_fixed_width_in_printable_ascii(tmp_path: Path) -> None:
    """Read by the widths of the specification alone: 256 bytes, then 256 a signal, field by field."""
    raw = write(tmp_path, record().with_track("annotations", track())).read_bytes()
    n_signals = int(raw[252:256])
    head = raw[: 256 * (n_signals + 1)]
    assert all(32 <= byte <= 126 for byte in head)
    assert (raw[:8], raw[168:184], raw[184:192], raw[192:197]) == (b"0       ", b"29.02.2423.59.58", b"1280    ", b"EDF+C")
    at, columns = 256, []
    for width in (16, 80, 8, 8, 8, 8, 8, 80, 8, 32):
        columns.append([head[at + i * width : at + (i + 1) * width].decode().rstrip() for i in range(n_signals)])
        at += width * n_signals
    assert at == len(head)
    labels, _, units, low, high, digital_low, digital_high, _, counts, _ = columns
    assert labels == ["ECG II", "CVP", "Paw", "EDF Annotations"]
    assert units == ["mV", "mmHg", "cmH2O", ""]
    assert (low[1], high[1], digital_low[1], digital_high[1]) == ("-327.67", "327.67", "-32767", "32767")
    assert (float(low[3]), float(high[3]), digital_low[3], digital_high[3]) == (-1, 1, "-32768", "32767")
    record_samples = sum(map(int, counts))
    assert len(raw) == len(head) + int(raw[236:244]) * record_samples * 2
    assert record_samples * 2 <= 61440


@pytest.mark.parametrize(("start", "fraction"), [(START, "0.123456"), (START.replace(microsecond=0), "0"), (None, "0")])
def test_2_2_4_every_data_record_begins_with_its_time(tmp_path: Path, start: datetime | None, fraction: str) -> None:
    """+onset, 20, 20, 0; the fraction of the start time stands there and nowhere else; what is left of the signal is zeros."""
    path = write(tmp_path, record(start_time=start).with_track("annotations", track()))
    raw = path.read_bytes()
    n_signals, n_records = int(raw[252:256]), int(raw[236:244])
    width = 2 * int(raw[signal_field(path, 216, 8, n_signals - 1) :][:8])
    body = raw[256 * (n_signals + 1) :]
    size = len(body) // n_records
    for number in range(n_records):
        notes = body[(number + 1) * size - width : (number + 1) * size]
        stamp = fraction if number == 0 else str(number) + fraction.removeprefix("0")
        assert notes.startswith(f"+{stamp}\x14\x14\0".encode())
        assert notes.endswith(b"\0")
        for tal in notes.rstrip(b"\0").split(b"\0"):
            assert tal[:1] in (b"+", b"-")
            assert tal.endswith(b"\x14")


def test_2_1_what_is_no_number_is_an_error(tmp_path: Path) -> None:
    """A decimal comma turns calibrated signals into raw integers in other readers."""
    path = write(tmp_path, record())
    patch(path, signal_field(path, PHYSICAL_MIN, 8, 1), "-5,0", 8)
    with pytest.raises(FileError, match=r"'CVP'.*'-5,0'") as error:
        caval.read(path)
    one_line(error)


@pytest.mark.parametrize(
    ("offset", "width", "text", "word"),
    [(252, 4, "0", "number of signals"), (252, 4, "-3", "number of signals"), (244, 8, "0", "data record"), (244, 8, "-1", "data record"),
     (244, 8, "nan", "duration"), (184, 8, "99", "header"), (236, 8, "many", "data records"), (0, 8, "1", "not an EDF")],
)
def test_2_1_impossible_header_values(tmp_path: Path, offset: int, width: int, text: str, word: str) -> None:
    path = patch(write(tmp_path, record()), offset, text, width)
    with pytest.raises(FileError, match=word) as error:
        caval.read(path)
    one_line(error)


def test_2_1_record_count_that_lies(tmp_path: Path) -> None:
    for count in ("7", "9"):
        path = patch(write(tmp_path, record(), f"r{count}.edf"), 236, count, 8)
        with pytest.raises(FileError, match="bytes") as error:
            caval.read(path)
        one_line(error)


def test_2_1_unknown_record_count_is_counted(tmp_path: Path) -> None:
    """−1 is what stands there while a recorder runs; one that never closed its file leaves it, and a part of a record."""
    path = patch(write(tmp_path, record()), 236, "-1", 8)
    got = caval.read(path)
    assert got.duration_s == 8.0
    assert not got.notes
    path.write_bytes(path.read_bytes()[:-11])
    got = caval.read(path)
    assert got.duration_s == 7.0
    assert len(got.notes) == 1


def test_2_1_numbers_in_eight_characters() -> None:
    for value in (-327.68, 0.1, 1e-7, -1234567.0, 1 / 3, 100.0, -0.000123456, 99999999.0, 1e20, 5.0):
        text = number_field(value, "limit")
        assert len(text) == 8
        assert float(text) == pytest.approx(value, rel=4e-3)  # three digits beside a sign, six zeros or an exponent
    assert number_field(-32.768, "limit") == b"-32.768 "


def test_2_1_limits_that_eight_characters_cannot_hold(tmp_path: Path) -> None:
    """A rounded limit shifts every value: limits are exact, or next to exact, or refused."""
    import pyedflib

    codes = np.array([-30000, 0, 12345, 30000], dtype=np.int16).repeat(50)
    lines = {
        "third": Calibration(-32768, 32767, -32768 / 3, 32767 / 3),  # no decimal is exact
        "mitdb": Calibration(-32768, 32767, -32768 / 409.6, 32767 / 409.6),  # −80 is, 79.9975586 is not, 79.84375 is
        "volts": Calibration(-32768, 32767, -3.2768e-5, 3.2767e-5),  # needs an exponent
    }
    sent = Recording.from_arrays({k: (codes, 50.0, "V") for k in lines}, name="rec", calibrations=lines)
    path = write(tmp_path, sent)
    with pyedflib.EdfReader(str(path)) as reader:
        for number, (a, b) in enumerate(zip(sent.channels, caval.read(path).channels, strict=True)):
            np.testing.assert_array_equal(b.digital(), codes)
            np.testing.assert_allclose(b.physical(), a.physical(), rtol=0, atol=0.01 * a.calibration.scale)
            np.testing.assert_allclose(reader.readSignal(number), a.physical(), rtol=0, atol=0.01 * a.calibration.scale)
    mitdb = caval.read(path).channel("mitdb")
    assert (mitdb.calibration.digital_max, mitdb.header["edf.physical_max"]) == (32704, "79.84375")
    far = Calibration(-32768, 32767, 1e6, 1e6 + 0.065535)
    with pytest.raises(InputError, match="8 characters") as error:
        caval.write(Recording.from_arrays({"P": (codes, 50.0, "Pa")}, name="rec", calibrations={"P": far}), tmp_path / "far.edf")
    one_line(error)


@pytest.mark.parametrize(("label", "unit"), [("a label of seventeen", "mmHg"), ("CVP", "millimetres"), ("血压", "mmHg")])
def test_2_1_labels_and_units_that_do_not_fit_are_refused(tmp_path: Path, label: str, unit: str) -> None:
    sent = Recording.from_arrays({label: (np.zeros(125), 125.0, unit)}, name="rec")
    with pytest.raises(InputError, match="rename it first") as error:
        caval.write(sent, tmp_path / "rec.edf")
    one_line(error)
    assert not list(tmp_path.iterdir())


def test_2_1_micro_and_subscripts_are_spelt_out(tmp_path: Path) -> None:
    sent = Recording.from_arrays({"EEG µ": (np.zeros(125), 125.0, "µV"), "Paw": (np.zeros(125), 125.0, "cmH₂O")}, name="rec")
    got = caval.read(write(tmp_path, sent))
    assert [(c.label, c.unit) for c in got.channels] == [("EEG u", "uV"), ("Paw", "cmH2O")]


def test_2_1_header_text_of_strangers_in_latin_1_and_utf_8(tmp_path: Path) -> None:
    for number, raw in enumerate(("µV".encode("latin-1"), "µV".encode())):
        path = write(tmp_path, record(), f"r{number}.edf")
        patch(path, signal_field(path, 16 + 80, 8, 0), raw.decode("latin-1"), 8)
        assert caval.read(path).channels[0].unit == "µV"


def test_2_1_dates(tmp_path: Path) -> None:
    path = write(tmp_path, record(start_time=datetime(2024, 5, 6, 7, 8, 9)))
    assert caval.read(patch(path, 88, "no EDF+ text", 80)).start_time == datetime(2024, 5, 6, 7, 8, 9)
    assert caval.read(patch(path, 168, "06.05.85", 8)).start_time == datetime(1985, 5, 6, 7, 8, 9)
    assert caval.read(patch(path, 168, "06.05.84", 8)).start_time == datetime(2084, 5, 6, 7, 8, 9)
    odd = caval.read(patch(path, 168, "00.00.00", 8))
    assert odd.start_time is None
    assert "00.00.00" in odd.notes[0]


def test_2_1_a_time_of_day_without_a_date_is_kept(tmp_path: Path) -> None:
    path = write(tmp_path, record(start_time=datetime(1985, 1, 1, 13, 24, 5)))
    patch(path, 88, "Startdate X X X X", 80)
    got = caval.read(path)
    assert got.start_time == datetime(1985, 1, 1, 13, 24, 5)
    assert write(tmp_path, got, "again.edf").read_bytes() == path.read_bytes()


def test_2_1_3_free_text_of_plain_edf_goes_where_edf_plus_allows_it(tmp_path: Path) -> None:
    """pyedflib refuses EDF+ files whose patient and recording fields lack the subfields."""
    import pyedflib

    path = write(tmp_path, record())
    patch(path, 8, "Müller, bed 4", 80)
    patch(path, 88, "OR 7, Carescape", 80)
    got = write(tmp_path, caval.read(path), "plus.edf")
    with pyedflib.EdfReader(str(got)) as reader:
        assert reader.getStartdatetime().replace(microsecond=0) == START.replace(microsecond=0)  # its fraction is wrong tenfold
    header = caval.read(got).header
    assert header["edf.patient"] == "X X X X Muller, bed 4"
    assert header["edf.recording"] == "Startdate 29-FEB-2024 X X X OR 7, Carescape"


# 2.2: annotations


def test_2_2_2_time_stamped_annotation_lists() -> None:
    """The examples of the specification."""
    records = [
        b"+0\x14\x14\x00+180\x14Lights off\x14Close door\x14\x00\x00\x00",
        b"+30\x14\x14\x00-0.065\x14Pre-stimulus beep\x14\x00+1800.2\x1525.5\x14Apnea\x14\x00",
        b"+60\x14\x14Recording ends\x14\x00",
    ]
    starts, onset, duration, text = decode(records, "example")
    np.testing.assert_array_equal(starts, [0, 30, 60])
    assert text == ["Lights off", "Close door", "Pre-stimulus beep", "Apnea", "Recording ends"]
    assert onset == [180, 180, -0.065, 1800.2, 60]
    assert duration == [0, 0, 0, 25.5, 0]
    with pytest.raises(FileError, match="no time") as error:
        decode([b"+0\x14\x14\x00noon\x14Lunch\x14\x00"], "example")
    one_line(error)


def test_2_2_2_separators_in_a_text_are_refused() -> None:
    assert encode(0.5, 0.0, "a\nb") == b"+0.5\x14a\nb\x14\x00"
    for text in ("a\x14b", "a\x00", "\x15"):
        with pytest.raises(InputError, match="control character"):
            encode(1.0, 0.0, text)


def test_2_2_3_the_fullest_record_sizes_all_and_none_is_lost() -> None:
    stamps = [encode(float(k), 0.0, "") for k in range(10)]
    tals = [encode(0.001 * k, 0.0, "CVP/a") for k in range(500)]
    laid, room = spread(stamps, tals, np.zeros(500, dtype=np.int64))
    assert max(len(part) for part in laid) <= room
    assert room < 2 * sum(map(len, tals)) / 10
    assert decode(laid, "x")[3] == ["CVP/a"] * 500


def test_2_2_4_gaps_between_records_of_edf_d(tmp_path: Path) -> None:
    """Other readers join the records of an EDF+D file silently."""
    path = _discontinuous(tmp_path)
    sent, got = record(), caval.read(path)
    assert got.duration_s == 11.4
    assert got.start_time == START
    for channel in got.channels:
        rate, source = channel.sampling_rate, sent.channel(channel.label).physical()
        assert channel.gaps.tolist() == [[3 * rate, 6.4 * rate]]
        np.testing.assert_array_equal(got.read(channel.label, 0, 3), source[: round(3 * rate)])
        np.testing.assert_array_equal(got.read(channel.label, 6.4), source[round(3 * rate) :])
        assert np.isnan(got.read(channel.label, 3.0, 6.4)).all()
    same_annotations(got.annotations, track(), 1e-9)
    again = caval.read(write(tmp_path, got, "again.edf"))
    for a, b in zip(got.channels, again.channels, strict=True):
        np.testing.assert_array_equal(b.physical(), a.physical())


def _discontinuous(tmp_path: Path, second_start: float = 6.4, name: str = "gap.edf") -> Path:
    """The test record with its fourth data record, and those after it, at another time."""
    from caval_edf.header import read_header

    path = write(tmp_path, record(duration_s=8.0).with_track("annotations", track()), name)
    header = read_header(path)
    raw = bytearray(path.read_bytes())
    raw[192:236] = b"EDF+D".ljust(44)
    width = header.signals[-1].n_samples * 2
    for number in range(3, 8):
        end = header.header_bytes + (number + 1) * header.record_samples * 2
        held = bytes(raw[end - width : end]).rstrip(b"\0") + b"\0"
        old, new = encode(number + 0.123456, 0, ""), encode(second_start + number - 3 + 0.123456, 0, "")
        assert held.startswith(old)
        raw[end - width : end] = (new + held[len(old) :]).ljust(width, b"\0")[:width]
    path.write_bytes(bytes(raw))
    return path


@pytest.mark.parametrize("late_s", [1e-9, 0.001, 0.004, 0.012, 0.02, 0.5, 1 / 3])
def test_2_2_4_a_gap_of_part_of_a_sample_loses_none(tmp_path: Path, late_s: float) -> None:
    """Half a sample at 125 Hz is 4 ms: rounding each data record on its own would put two samples in one place."""
    for name in ("odd", "even"):
        start = 3.0 + late_s + (1.0 if name == "odd" else 0.0)
        got = caval.read(_discontinuous(tmp_path, start, f"{name}.edf"))
        for channel in got.channels:
            sent = record().channel(channel.label).digital()
            kept = np.delete(channel.digital(), [i for low, high in channel.gaps for i in range(low, high)])
            np.testing.assert_array_equal(kept, sent, err_msg=channel.label)
            at = (channel.n_samples - round(5 * channel.sampling_rate)) / channel.sampling_rate
            assert abs(at - start) <= 0.5 / channel.sampling_rate + 1e-6


def test_2_2_4_records_that_overlap_are_refused(tmp_path: Path) -> None:
    with pytest.raises(FileError, match="overlap") as error:
        caval.read(_discontinuous(tmp_path, 2.5))
    one_line(error)


def test_2_2_4_a_file_that_says_continuous_and_is_not_is_noted(tmp_path: Path) -> None:
    path = patch(_discontinuous(tmp_path), 192, "EDF+C", 44)
    got = caval.read(path)
    assert got.duration_s == 8.0
    assert "read as continuous" in got.notes[0]


def test_annotations_written_by_edfio(tmp_path: Path) -> None:
    import edfio

    path = tmp_path / "two.edf"
    signal = edfio.EdfSignal(np.arange(1000) / 10, 100, label="CVP", physical_dimension="mmHg", physical_range=(-500, 500))
    edf = edfio.Edf([signal], annotations=[edfio.EdfAnnotation(1.5, None, "one"), edfio.EdfAnnotation(2.5, 3.0, "two")])
    edf.write(path)
    got = caval.read(path)
    assert list(zip(got.annotations.onset_s, got.annotations.duration_s, got.annotations.text, strict=True)) == [
        (1.5, 0.0, "one"), (2.5, 3.0, "two"),
    ]
    assert got.labels == ("CVP",)


# rates and data records


def test_a_rate_that_is_no_whole_number_is_exact(tmp_path: Path) -> None:
    """62.4725 Hz: every data record has to be 400 s long; pyedflib and wfdb round the rate."""
    values = np.arange(2 * 24989, dtype=np.int16)
    sent = Recording.from_arrays({"RESP": (values, 62.4725, "")}, name="rec", calibrations={"RESP": STEPS})
    got = caval.read(write(tmp_path, sent)).channels[0]
    assert got.sampling_rate == 62.4725
    np.testing.assert_array_equal(got.digital(), values)


def test_rates_that_share_no_data_record_are_refused(tmp_path: Path) -> None:
    sent = Recording.from_arrays({"a": (np.zeros(10), 1 / 1021, ""), "b": (np.zeros(10), 1 / 1031, "")}, name="rec")
    with pytest.raises(InputError, match="resample one") as error:
        caval.write(sent, tmp_path / "rec.edf")
    one_line(error)


def test_a_skewed_channel_is_laid_on_the_clock(tmp_path: Path) -> None:
    early, late = (replace(c, start_s=s) for c, s in zip(record().channels[:2], (-0.1, 0.4), strict=True))
    got = caval.read(write(tmp_path, Recording("rec", (early, late))))
    np.testing.assert_array_equal(got.read(0, 0, 7.9), early.physical(50))
    assert np.isnan(got.read(1, 0.0, 0.4)).all()
    np.testing.assert_array_equal(got.read(1, 0.4, 8.0), late.physical(0, 950))


# marked files, read by others


def marks(n: int = 300, *, long_s: float = 8.0) -> Track:
    onset = np.sort(np.random.default_rng(3).uniform(0, long_s, n)).round(6)
    onset[[0, -1]] = 0.0, long_s - 0.002
    text = [f"CVP/{'acxvy'[i % 5]}" for i in range(n)]
    spans = [(1.0, 0.75, "BAD_CVP/flat"), (3.0, 2.0, "BAD_ECG/noise"), (6.0, 0.5, "BAD_CVP/clipped")]
    return Track.build(
        np.concatenate([onset, [s[0] for s in spans]]), [*text, *(s[2] for s in spans)],
        duration_s=np.concatenate([np.zeros(n), [s[1] for s in spans]]), channel=1,
    )


@pytest.mark.parametrize("start", [START, None])
def test_marked_file_opened_by_mne_and_pyedflib(tmp_path: Path, start: datetime | None) -> None:
    import mne
    import pyedflib

    theirs = Track.build([0.25, 5.0], ["intubation", "PEEP 10"], duration_s=[0.0, 1.0])
    sent, ours = record(start_time=start).with_track("annotations", theirs), marks()
    (path,) = write_marked(sent, ours, tmp_path, "rec")
    assert path.name == "rec_marked.edf"
    whole = theirs.join(ours)
    same_annotations(read_annotations(path), whole, 1e-9)

    with pyedflib.EdfReader(str(path)) as reader:
        onset, duration, text = reader.readAnnotations()
        digital = [reader.readSignal(i, digital=True) for i in range(3)]
    duration = np.array([float(d) if float(d) > 0 else 0.0 for d in duration])
    # pyedflib: 0.1 ms, and from the whole second of the start time where there is a fraction
    offset = onset.min() - whole.onset_s.min()
    assert offset == pytest.approx(0.0, abs=1e-4) or offset == pytest.approx(0.123456, abs=1e-4)
    same_annotations(Track.build(onset - offset, list(text), duration_s=duration), whole, 1.01e-4)
    for channel, read in zip(sent.channels, digital, strict=True):
        np.testing.assert_array_equal(read, channel.digital())

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # MNE on units it does not know
        raw = mne.io.read_raw_edf(path, preload=False, verbose="error")
    seen = raw.annotations
    same_annotations(Track.build(seen.onset, list(seen.description), duration_s=seen.duration), whole, 1e-6)


def test_marked_bdf_stays_bdf_and_an_empty_track_is_written_too(tmp_path: Path) -> None:
    path = write(tmp_path, record(), "rec.bdf")
    (marked,) = write_marked(caval.read(path), Track.empty(), tmp_path, "rec")
    assert marked.name == "rec_marked.bdf"
    assert not len(read_annotations(marked))


def test_wide_integers_of_another_format_need_bdf_only_when_used(tmp_path: Path) -> None:
    limits = Calibration(-(2**31), 2**31 - 1, -(2**31) / 100, (2**31 - 1) / 100, missing=-(2**31))
    small = np.array([-(2**31), -32768, 0, 32767], dtype=np.int64).repeat(100)
    sent = Recording.from_arrays({"CVP": (small, 100.0, "mmHg")}, name="rec", calibrations={"CVP": limits})
    (path,) = write_marked(sent, Track.empty(), tmp_path, "small")
    got = caval.read(path)
    assert path.suffix == ".edf"
    np.testing.assert_allclose(got.read("CVP"), sent.read("CVP"), rtol=0, atol=1e-4)
    large = Recording.from_arrays({"CVP": (small * 10, 100.0, "mmHg")}, name="rec", calibrations={"CVP": replace(limits, missing=None)})
    with pytest.raises(InputError, match="24 bits"):
        write_marked(large, Track.empty(), tmp_path, "large")


def test_plain_edf_without_annotations(tmp_path: Path) -> None:
    """A plain EDF file has no annotation signal; it is read as it is, and its copy is EDF+."""
    from caval_edf.header import read_header

    path = write(tmp_path, record(start_time=datetime(2024, 5, 6, 7, 8, 9)))
    header = read_header(path)
    raw = path.read_bytes()
    width = header.signals[-1].n_samples * 2
    body = np.frombuffer(raw[header.header_bytes :], np.uint8).reshape(header.n_records, -1)[:, :-width]
    n = len(header.signals)
    fields, at = [raw[:184] + str(256 * n).encode().ljust(8) + b" " * 44 + raw[236:252] + str(n - 1).encode().ljust(4)], 256
    for size in (16, 80, 8, 8, 8, 8, 8, 80, 8, 32):
        fields.append(raw[at : at + size * (n - 1)])
        at += size * n
    path.write_bytes(b"".join(fields) + body.tobytes())
    got = caval.read(path)
    assert not len(got.annotations)
    for a, b in zip(record().channels, got.channels, strict=True):
        np.testing.assert_array_equal(b.digital(), a.digital())
    assert caval.read(write(tmp_path, got, "plus.edf")).start_time == got.start_time


def test_ten_thousand_records_of_a_fraction_of_a_second(tmp_path: Path) -> None:
    """The time of each data record is written exactly, however many there are."""
    values = (np.arange(10_000 * 5) % 1000).astype(np.int16)
    sent = Recording.from_arrays({"CVP": (values, 50.0, "mmHg")}, name="rec", calibrations={"CVP": STEPS})
    sent = replace(sent, header={"edf.record_duration": "0.1"}).with_track("annotations", Track.build([999.95], ["last"]))
    got = caval.read(write(tmp_path, sent))
    assert got.header["edf.record_duration"] == "0.1"
    assert not got.notes
    assert got.annotations.onset_s.tolist() == [999.95]
