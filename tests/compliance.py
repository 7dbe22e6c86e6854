"""The one suite that every format with `read` and `write` passes.

A test module of a format makes a class of it::

    class TestEdf(FormatCompliance):
        suffix = ".edf"
        others = (by_pyedflib, by_edfio)

and names the format's resolution and unrelated readers. What is written here is read back by ours and by each of those.
"""

from __future__ import annotations

import contextlib
from collections.abc import Callable
from dataclasses import dataclass, replace
from datetime import datetime
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

import caval
from caval.errors import FileError, InputError
from caval.recording import Calibration, Recording
from caval.track import Track

START = datetime(2024, 2, 29, 23, 59, 58, 123456)
STEPS = Calibration(-32767, 32767, -327.67, 327.67)


def record(*, start_time: datetime | None = START, duration_s: float = 8.0, seed: int = 7) -> Recording:
    """Three channels at three rates, integers over the whole range, both rails included."""
    rng = np.random.default_rng(seed)
    calibrations = {
        "ECG II": Calibration(-32767, 32767, -32.767, 32.767),
        "CVP": STEPS,
        "Paw": Calibration(-2048, 2047, -20.48, 20.47),
    }
    arrays = {}
    for (label, c), rate, unit in zip(calibrations.items(), (500.0, 125.0, 25.0), ("mV", "mmHg", "cmH2O"), strict=True):
        values = rng.integers(c.digital_min, c.digital_max + 1, round(duration_s * rate), dtype=np.int16)
        values[[0, -1]] = c.digital_min, c.digital_max
        arrays[label] = (values, rate, unit)
    return Recording.from_arrays(arrays, name="rec", start_time=start_time, calibrations=calibrations)


def track() -> Track:
    """Instants and spans: at 0, between samples, in the last sample, before the start and after the end; texts alike and apart."""
    return Track.build(
        [-1.5, 0.0, 0.5, 1.0004, 1.0004, 3.25, 7.998, 9.5],
        ["began earlier", "at zero", "CVP/a", "CVP/c", "same time", "fluid bolus 250 ml, slowly", "CVP/v", "too late"],
        duration_s=[0.0, 0.0, 0.0, 0.0, 1.5, 2.25, 0.0, 0.0],
    )


def same_annotations(got: Track, sent: Track, tolerance_s: float) -> None:
    """Equal texts in equal places; where times are equal the order does not count."""
    assert sorted(got.text) == sorted(sent.text)
    for column in ("onset_s", "duration_s"):
        a, b = (getattr(t, column)[np.lexsort((t.onset_s, t.text.astype(str)))] for t in (got, sent))
        np.testing.assert_allclose(a, b, rtol=0, atol=tolerance_s)


def one_line(error: pytest.ExceptionInfo) -> str:
    """The message, which has one line."""
    message = str(error.value)
    assert message
    assert "\n" not in message
    return message


@dataclass(frozen=True)
class Seen:
    """What another library reads from a file. `time_error_s` is what it rounds annotation times to."""

    physical: dict[str, NDArray]
    annotations: Track
    digital: dict[str, NDArray] | None = None
    time_error_s: float = 0.0


class FormatCompliance:
    suffix: str
    others: tuple[Callable[[Path], Seen], ...]
    texts: tuple[str, ...] = ("Blutdruck fällt", "5 cmH₂O PEEP", "µV", "ciśnienie", "中心静脉压")
    """Annotation texts outside ASCII that the format keeps."""
    refused_texts: tuple[str, ...] = ()
    """Those that it cannot hold so that every reader sees them."""
    time_step_s: float
    """What the format rounds annotation times to: half of it is the error allowed, a whole one at 0 s."""
    samples_file: str = ""
    """Ending of the file that holds the samples, where it is another."""

    @pytest.fixture
    def path(self, tmp_path: Path) -> Path:
        return tmp_path / f"rec{self.suffix}"

    def trip(self, recording: Recording, path: Path) -> Recording:
        made = caval.write(recording, path)
        assert path in made
        assert all(p.is_file() for p in made)
        return caval.read(path)

    def test_stored_integers_are_the_same_bit_for_bit(self, path: Path) -> None:
        sent = record()
        got = self.trip(sent, path)
        for a, b in zip(sent.channels, got.channels, strict=True):
            np.testing.assert_array_equal(b.digital(), a.digital(), err_msg=a.label)

    def test_other_libraries_read_the_same_integers_and_values(self, path: Path) -> None:
        sent = record()
        self.trip(sent, path)
        for other in self.others:
            seen = other(path)
            assert list(seen.physical) == list(sent.labels)
            for channel in sent.channels:
                what = f"{other.__name__}, {channel.label}"
                if seen.digital is not None:
                    np.testing.assert_array_equal(seen.digital[channel.label], channel.digital(), err_msg=what)
                # 1e-3 of a stored step: other libraries compute in another order, some from a rounded gain
                off = np.abs(seen.physical[channel.label] - channel.physical()).max()
                assert off < 1e-3 * channel.calibration.scale, what

    def test_other_libraries_read_the_same_annotations(self, path: Path) -> None:
        """Within the record, texts of up to 40 characters and from a start on a whole second: what all of them can."""
        sent = Track.build(
            [0.01, 0.5, 1.0004, 1.5, 3.25, 7.99], ["first", "CVP/a", "CVP/c", "BAD_CVP/flat", "fluid bolus 250 ml, slowly", "CVP/v"],
            duration_s=[0.0, 0.0, 0.0, 1.5, 2.25, 0.0],
        )
        self.trip(record(start_time=START.replace(microsecond=0)).with_track("annotations", sent), path)
        for other in self.others:
            seen = other(path)
            same_annotations(seen.annotations, sent, self.time_step_s / 2 + seen.time_error_s + 1e-9)

    def test_other_libraries_read_many_annotations(self, path: Path) -> None:
        """Several thousand in one second of a minute: all kept, none moved."""
        onset = 30 + np.arange(4000) / 4000
        sent = Track.build(onset, [f"CVP/{'acxvy'[i % 5]}" for i in range(4000)])
        arrays = {"CVP": (np.zeros(7500, dtype=np.int16), 125.0, "mmHg"), "ECG": (np.zeros(30000, dtype=np.int16), 500.0, "mV")}
        made = Recording.from_arrays(arrays, name="rec", calibrations={"CVP": STEPS, "ECG": STEPS})
        got = self.trip(made.with_track("annotations", sent), path)
        for track_, error_s in [(got.annotations, 0.0), *((s.annotations, s.time_error_s) for s in (o(path) for o in self.others))]:
            assert len(track_) == 4000
            np.testing.assert_allclose(track_.onset_s, sent.onset_s, rtol=0, atol=self.time_step_s / 2 + error_s + 1e-9)

    def test_labels_units_rates_lengths_and_calibrations(self, path: Path) -> None:
        sent = record()
        got = self.trip(sent, path)
        assert got.labels == sent.labels
        assert [c.unit for c in got.channels] == [c.unit for c in sent.channels]
        assert [c.sampling_rate for c in got.channels] == [c.sampling_rate for c in sent.channels]
        assert [c.n_samples for c in got.channels] == [c.n_samples for c in sent.channels]
        for a, b in zip(sent.channels, got.channels, strict=True):
            # 1e-4 of a stored step: the rounding of decimal limits is far below what a sample can show
            np.testing.assert_allclose(b.physical(), a.physical(), rtol=0, atol=1e-4 * a.calibration.scale)
        assert got.duration_s == sent.duration_s

    def test_labels_are_found_in_any_case_and_a_wrong_one_is_answered_with_those_there_are(self, path: Path) -> None:
        got = self.trip(record(), path)
        assert got.index("CVP") == got.index("cvp") == 1
        with pytest.raises(InputError) as error:
            got.channel("PAP")
        assert "'PAP'" in one_line(error)
        assert "ECG II, CVP, Paw" in str(error.value)

    def test_start_time_to_the_microsecond(self, path: Path) -> None:
        assert self.trip(record(), path).start_time == START

    @pytest.mark.parametrize("start", [datetime(1985, 1, 1), datetime(1970, 1, 1, 12), datetime(2100, 12, 31, 23, 59, 59, 999999), None])
    def test_start_times_at_the_edges_and_none(self, path: Path, start: datetime | None) -> None:
        got = self.trip(record(start_time=start), path)
        assert got.start_time == start
        assert not got.notes

    @pytest.mark.parametrize("start", [START, None])
    def test_annotations_with_durations_at_zero_before_the_start_and_after_the_end(self, path: Path, start: datetime | None) -> None:
        got = self.trip(record(start_time=start).with_track("annotations", track()), path)
        same_annotations(got.annotations, track(), self.time_step_s + 1e-9)

    def test_annotation_text_outside_ascii(self, path: Path) -> None:
        sent = Track.build(np.arange(1.0, 1.0 + len(self.texts)), self.texts)
        got = self.trip(record(start_time=None).with_track("annotations", sent), path)
        assert list(got.annotations.text) == list(self.texts)
        for other in self.others:
            assert list(other(path).annotations.text) == list(self.texts), other.__name__

    def test_annotation_text_that_the_format_cannot_hold_is_refused(self, path: Path) -> None:
        for text in self.refused_texts:
            with pytest.raises(InputError) as error:
                caval.write(record().with_track("annotations", Track.build([1.0], [text])), path)
            assert repr(text) in one_line(error)
            assert not list(path.parent.iterdir())

    def test_many_annotations_in_little_time_are_all_kept(self, path: Path) -> None:
        onset = np.concatenate([np.linspace(0.1, 0.3, 700), np.linspace(0.4, 7.9, 300)])
        sent = Track.build(onset, [f"CVP/{'acxvy'[i % 5]}" for i in range(len(onset))])
        got = self.trip(record().with_track("annotations", sent), path).annotations
        assert len(got) == 1000
        np.testing.assert_allclose(got.onset_s, sent.onset_s, rtol=0, atol=self.time_step_s / 2 + 1e-9)

    def test_a_part_is_the_same_as_a_slice_of_the_whole(self, path: Path) -> None:
        got = self.trip(record(), path)
        for channel in got.channels:
            whole, n = channel.physical(), channel.n_samples
            for start, stop in ((0, 0), (0, 1), (n - 1, n), (n // 3, n // 2), (1, n - 1), (n, n)):
                np.testing.assert_array_equal(channel.physical(start, stop), whole[start:stop])
        np.testing.assert_array_equal(got.read("CVP", 2.0, 3.0), got.channel("CVP").physical(250, 375))

    def test_floats_become_steps_of_a_hundredth_of_a_mmhg_and_nan_stays_nan(self, path: Path) -> None:
        values = 8 + 3 * np.sin(np.arange(1000) / 40)
        values[300:340] = np.nan
        sent = Recording.from_arrays({"CVP": (values, 125.0, "mmHg"), "PLETH": (values * 1e4, 125.0, "")}, name="rec")
        got = self.trip(sent, path)
        np.testing.assert_allclose(got.read("CVP"), values, rtol=0, atol=0.005 + 1e-9)
        np.testing.assert_allclose(got.read("PLETH"), values * 1e4, rtol=0, atol=5.0 + 1e-6)
        np.testing.assert_array_equal(np.isnan(got.read("CVP")), np.isnan(values))
        assert [c.unit for c in got.channels] == ["mmHg", ""]
        assert not len(got.annotations)

    def test_gaps_stay_gaps_and_belong_to_their_channel(self, path: Path) -> None:
        sent = record()
        broken = replace(sent.channels[1], gaps=np.array([[0, 10], [400, 525]], dtype=np.int64))
        sent = replace(sent, channels=(sent.channels[0], broken, sent.channels[2]))
        got = self.trip(sent, path)
        for a, b in zip(sent.channels, got.channels, strict=True):
            np.testing.assert_array_equal(np.isnan(b.physical()), np.isnan(a.physical()), err_msg=a.label)
            known = ~np.isnan(a.physical())
            np.testing.assert_array_equal(b.digital()[known], a.digital()[known])

    def test_a_part_filled_last_block_gets_its_length_back(self, path: Path) -> None:
        values = np.arange(1003, dtype=np.int16)
        sent = Recording.from_arrays(
            {"CVP": (values, 125.0, "mmHg"), "ECG": (np.arange(4013, dtype=np.int16), 500.0, "mV")},
            name="rec", calibrations={"CVP": STEPS, "ECG": STEPS},
        )
        got = self.trip(sent, path)
        for a, b in zip(sent.channels, got.channels, strict=True):
            np.testing.assert_array_equal(b.digital(), a.digital())

    def test_the_lowest_code_is_a_value_when_the_source_says_so(self, path: Path) -> None:
        """−32768 is a pressure on the rail in EDF and means 'missing' in WFDB format 16."""
        values = np.array([-32768, -32767, 0, 32767] * 250, dtype=np.int16)
        whole = Calibration(-32768, 32767, -327.68, 327.67)
        sent = Recording.from_arrays({"CVP": (values, 125.0, "mmHg")}, name="rec", calibrations={"CVP": whole})
        got = self.trip(sent, path)
        np.testing.assert_array_equal(got.channel("CVP").digital(), values)
        assert not np.isnan(got.read("CVP")).any()

    def test_the_missing_code_is_nan_when_the_source_says_so(self, path: Path) -> None:
        values = np.array([-32768, -32768, 5, 6] * 250, dtype=np.int16)
        missing = Calibration(-32768, 32767, -327.68, 327.67, missing=-32768)
        sent = Recording.from_arrays({"CVP": (values, 125.0, "mmHg")}, name="rec", calibrations={"CVP": missing})
        got = self.trip(sent, path)
        np.testing.assert_array_equal(np.isnan(got.read("CVP")), values == -32768)
        np.testing.assert_array_equal(got.channel("CVP").digital(), values)

    def test_channels_of_one_label_keep_their_own_gaps(self, path: Path) -> None:
        first, second = record().channels[1], record(seed=8).channels[1]
        sent = Recording("rec", (first, replace(second, gaps=np.array([[100, 200]], dtype=np.int64))))
        got = self.trip(sent, path)
        assert [int(np.isnan(c.physical()).sum()) for c in got.channels] == [0, 100]

    def test_inverted_and_offset_calibrations(self, path: Path) -> None:
        values = np.linspace(-2000, 2000, 500).astype(np.int16)
        calibrations = {"up": Calibration(-2048, 2047, 900.0, 1100.0), "down": Calibration(-2048, 2047, 5.0, -5.0)}
        sent = Recording.from_arrays({k: (values, 125.0, "mbar") for k in calibrations}, name="rec", calibrations=calibrations)
        got = self.trip(sent, path)
        for a, b in zip(sent.channels, got.channels, strict=True):
            np.testing.assert_array_equal(b.digital(), values)
            np.testing.assert_allclose(b.physical(), a.physical(), rtol=0, atol=1e-3 * abs(a.calibration.scale))

    def test_calibrations_of_every_kind(self, path: Path) -> None:
        """Any stored range, scale and offset whose limits fit eight characters, upright and inverted."""
        rng = np.random.default_rng(4)
        for number in range(25):
            low, high = np.sort(rng.choice(np.arange(-32767, 32768), 2, replace=False)).tolist()
            first, last = rng.normal(0, 10.0 ** rng.integers(0, 4), 2).round(2).tolist()
            limits = Calibration(low, high, first, last)
            codes = rng.integers(low, high + 1, 100).astype(np.int16)
            sent = Recording.from_arrays({"P": (codes, 50.0, "mmHg")}, name="rec", calibrations={"P": limits})
            channel = self.trip(sent, path.with_name(f"r{number}{self.suffix}")).channels[0]
            np.testing.assert_array_equal(channel.digital(), codes)
            np.testing.assert_allclose(channel.physical(), limits.to_physical(codes), rtol=0, atol=1e-3 * abs(limits.scale))

    def test_a_second_trip_changes_nothing_more(self, path: Path, tmp_path: Path) -> None:
        sent = record().with_track("annotations", track())
        once = self.trip(sent, path)
        twice = self.trip(once, tmp_path / f"again{self.suffix}")
        same_annotations(twice.annotations, once.annotations, 1e-9)
        assert twice.start_time == once.start_time
        for a, b in zip(once.channels, twice.channels, strict=True):
            np.testing.assert_array_equal(b.digital(), a.digital())
            assert b.calibration == a.calibration
            assert (b.label, b.unit, b.sampling_rate) == (a.label, a.unit, a.sampling_rate)

    @settings(max_examples=12, deadline=None, suppress_health_check=[HealthCheck.differing_executors], derandomize=True)
    @given(
        st.lists(st.integers(-32767, 32767), min_size=1, max_size=300), st.sampled_from([1.0, 12.5, 62.5, 100 / 3, 128.0, 250.0]),
        st.integers(1, 4),
    )
    def test_any_samples_at_any_rates(self, tmp_path_factory: pytest.TempPathFactory, codes: list[int], rate: float, times: int) -> None:
        values = np.array(codes, dtype=np.int16)
        arrays = {"a": (values, rate, "mmHg"), "b": (np.repeat(values, times), rate * times, "mmHg")}
        sent = Recording.from_arrays(arrays, name="rec", calibrations={"a": STEPS, "b": STEPS})
        got = self.trip(sent, tmp_path_factory.mktemp("any") / f"rec{self.suffix}")
        for a, b in zip(sent.channels, got.channels, strict=True):
            assert b.sampling_rate == pytest.approx(a.sampling_rate, rel=1e-12)
            np.testing.assert_array_equal(b.digital(), a.digital())

    def test_a_recording_without_channels_is_refused(self, path: Path) -> None:
        with pytest.raises(InputError) as error:
            caval.write(Recording("empty", ()), path)
        one_line(error)
        assert not path.exists()

    def test_annotations_without_a_finite_time_are_refused(self, path: Path) -> None:
        with pytest.raises(InputError) as error:
            caval.write(record().with_track("annotations", Track.build([np.nan], ["when?"])), path)
        one_line(error)
        assert not list(path.parent.iterdir())

    def test_a_missing_file(self, path: Path) -> None:
        with pytest.raises(FileError, match="no such file") as error:
            caval.read(path)
        one_line(error)

    def test_what_a_writer_refuses_or_fails_at_leaves_nothing_behind(self, path: Path) -> None:
        def broken(start: int, stop: int) -> NDArray:
            if stop > 500:
                raise OSError("the disk is gone")
            return np.zeros(stop - start, dtype=np.int16)

        first = record().channels[0]
        with pytest.raises(FileError) as error:
            caval.write(Recording("rec", (replace(first, source=broken),)), path)
        assert "the disk is gone" in one_line(error)
        assert not list(path.parent.iterdir())

    def test_a_file_in_the_way_is_left_alone(self, path: Path) -> None:
        self.trip(record(), path)
        before = {p.name: p.read_bytes() for p in path.parent.iterdir()}
        with pytest.raises(FileError) as error:
            caval.write(record(seed=8), path)
        one_line(error)
        with pytest.raises(FileError, match="is the input"):
            caval.write(caval.read(path), path, force=True)
        assert {p.name: p.read_bytes() for p in path.parent.iterdir()} == before

    def test_a_rate_that_is_no_whole_number_is_exact(self, path: Path) -> None:
        """62.4725 Hz beside 500 Hz: blocks of 400 s; pyedflib and wfdb round the rate."""
        slow, fast = (np.arange(n, dtype=np.int64) % 30000 for n in (3 * 24989, 3 * 200_000))
        sent = Recording.from_arrays(
            {"RESP": (slow.astype(np.int16), 62.4725, ""), "ECG": (fast.astype(np.int16), 500.0, "mV")},
            name="rec", calibrations={"RESP": STEPS, "ECG": STEPS},
        )
        got = self.trip(sent, path)
        assert [c.sampling_rate for c in got.channels] == [62.4725, 500.0]
        for a, b in zip(sent.channels, got.channels, strict=True):
            np.testing.assert_array_equal(b.digital(), a.digital())

    def test_a_channel_that_begins_before_the_record(self, path: Path) -> None:
        """A skew is kept, or laid on the clock; either way the values stand at their times, and none is left of one that ends before 0."""
        early, gone = (replace(c, start_s=s) for c, s in zip(record().channels[:2], (-0.4, -8.8), strict=True))
        got = self.trip(Recording("rec", (early, gone)), path)
        np.testing.assert_array_equal(got.read(0, 0.0, 7.6), early.physical(200))
        assert not len(got.read(1, 0.0))

    @pytest.mark.parametrize("channels", [("one",), ("one", "two")])
    def test_no_samples_at_all(self, path: Path, channels: tuple[str, ...]) -> None:
        got = self.trip(Recording.from_arrays({c: (np.zeros(0), 125.0, "mmHg") for c in channels}, name="rec"), path)
        assert [c.n_samples for c in got.channels] == [0] * len(channels)

    def test_labels_that_are_empty_or_alike(self, path: Path) -> None:
        sent = Recording("rec", tuple(replace(c, label=label) for c, label in zip(record().channels, ("", "P", "P"), strict=True)))
        assert self.trip(sent, path).labels == ("", "P", "P")

    @pytest.mark.parametrize("content", [b"", b"garbage", b"\0" * 5000, bytes(range(256)) * 40, b"0       " + b"x" * 600])
    def test_garbage(self, path: Path, content: bytes) -> None:
        path.write_bytes(content)
        with pytest.raises(FileError) as error:
            caval.read(path)
        assert path.name in one_line(error)

    def test_damaged_bytes_give_a_file_error_or_a_recording(self, path: Path) -> None:
        self.trip(record(duration_s=2.0).with_track("annotations", track()), path)
        rng, whole = np.random.default_rng(5), path.read_bytes()
        words = [b"-1", b"nan", b"1e9", b"99999999", b"0", b"\xff", b"~", b"/2", b":", b" ", b"EDF+D", b"+", b"1.5"]
        for _ in range(200):
            raw = bytearray(whole)
            for _ in range(2):
                at = int(rng.integers(0, min(len(raw), 256 * 5)))
                word = words[rng.integers(len(words))]
                raw[at : at + len(word)] = word
            path.write_bytes(bytes(raw[: len(whole)]))
            with contextlib.suppress(FileError):
                for channel in caval.read(path).channels:
                    channel.physical(0, min(channel.n_samples, 100))

    def test_a_truncated_file_says_so(self, path: Path) -> None:
        self.trip(record(), path)
        target = path.with_suffix(self.samples_file or self.suffix)
        whole = target.read_bytes()
        for keep in (len(whole) - 1, len(whole) // 2):
            target.write_bytes(whole[:keep])
            with pytest.raises(FileError, match="truncated") as error:
                caval.read(path)
            assert target.name in one_line(error)
