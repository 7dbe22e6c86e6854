"""The MNE plugin: a Raw from a Recording, annotations, events and epochs, on every clock that MNE has."""

from __future__ import annotations

import pickle
import warnings
from dataclasses import replace
from datetime import UTC, datetime
from itertools import pairwise

import numpy as np
import pytest

from caval import registry
from caval.errors import CavalError, InputError
from caval.model.sketch import sketch
from caval.recording import Recording
from caval.track import Track

with warnings.catch_warnings():
    warnings.simplefilter("ignore")
    import mne

    from caval_mne import RawCaval, annotate_cvp, create_cvp_epochs, find_cvp_events, read_raw_wfdb

QUIET = {"verbose": "ERROR"}
START = datetime(2031, 5, 4, 3, 2, 1, 654_321)


@pytest.fixture(scope="module")
def drawn():
    """A minute with a flush and a flat stretch of the venous line."""
    return sketch(minutes=1, seed=5)


@pytest.fixture(scope="module")
def raw(drawn):
    return RawCaval(replace(drawn.recording, start_time=START), preload=True, **QUIET)


@pytest.fixture(scope="module")
def annotations(raw):
    return annotate_cvp(raw, **QUIET)


def _near(found, truth, within_s=0.03):
    """Share of `truth` with a neighbour in `found`. 30 ms is half the way from a to c."""
    return (np.abs(np.asarray(found)[:, None] - np.asarray(truth)[None, :]).min(axis=0) <= within_s).mean()


def _truth(drawn, mark, start_s=1.0, stop_s=29.0):
    """Drawn times of a wave in the part of the record that nothing spoils."""
    times = drawn.marks.loc[drawn.marks["mark"] == mark, "time_s"].to_numpy()
    return times[(times > start_s) & (times < stop_s)]


# RawCaval


def test_raw_has_types_units_date_and_recorded_values(raw, drawn):
    assert raw.get_channel_types() == ["ecg", "misc", "misc"]
    assert raw.info["sfreq"] == 500
    assert raw.info["meas_date"] == START.replace(tzinfo=UTC)
    assert raw.info["description"] == "units: ECG II V, CVP mmHg, ABP mmHg"
    ecg, cvp, _ = raw.get_data()
    np.testing.assert_array_equal(ecg, drawn.recording.read("ECG II") * 1e-3)
    np.testing.assert_array_equal(cvp[::4], drawn.recording.read("CVP"))


def test_values_between_recorded_samples_lie_on_straight_lines_and_the_last_is_held():
    recording = Recording.from_arrays({"ECG": (np.zeros(16), 400.0, "mV"), "CVP": ([1.0, 5.0, 3.0, 7.0], 100.0, "mmHg")})
    cvp = RawCaval(recording, **QUIET).get_data()[1]
    np.testing.assert_allclose(cvp, [1, 2, 3, 4, 5, 4.5, 4, 3.5, 3, 4, 5, 6, 7, 7, 7, 7])


def test_a_sample_is_the_same_in_whatever_stretch_it_is_read(drawn, raw):
    lazy = RawCaval(replace(drawn.recording, start_time=START), **QUIET)
    edges = [0, 1, 1001, 7777, 20_003, lazy.n_times]
    pieces = [lazy[:, a:b][0] for a, b in pairwise(edges)]
    np.testing.assert_array_equal(np.hstack(pieces), raw.get_data())
    np.testing.assert_array_equal(lazy.copy().crop(10, 20).get_data(["ABP", "ECG II"]), raw.get_data(["ABP", "ECG II"], 5000, 10_001))


def test_rate_takes_the_channels_of_one_rate_as_recorded(drawn):
    slow = RawCaval(drawn.recording, rate=125.0, **QUIET)
    assert slow.ch_names == ["CVP", "ABP"]
    np.testing.assert_array_equal(slow.get_data()[0], drawn.recording.read("CVP"))
    with pytest.raises(InputError, match=r"no channels of 77 Hz.*'CVP' \(125 Hz\)"):
        RawCaval(drawn.recording, rate=77.0, **QUIET)


def test_pressures_in_other_units_become_mmhg_and_ecg_volts():
    units = {"CVP": (10.0, "cmH2O"), "II": (500.0, "µV"), "Resp": (1.0, "Ohm"), "X": (3.0, "")}
    raw = RawCaval(Recording.from_arrays({k: ([value, value], 100.0, unit) for k, (value, unit) in units.items()}), **QUIET)
    assert raw.get_channel_types() == ["misc", "ecg", "resp", "misc"]
    # 1 cmH2O = 0.735559 mmHg
    np.testing.assert_allclose(raw.get_data()[:, 0], [7.35559, 500e-6, 1.0, 3.0], rtol=1e-6)


def test_gaps_are_nan_and_annotated():
    units = {"ECG": "mV", "CVP": "mmHg", "ABP": "mmHg"}
    recording = Recording.from_arrays({label: (np.ones(1000), 100.0, unit) for label, unit in units.items()})
    both = np.array([[200, 300]])
    gaps = {"ECG": both, "CVP": np.array([[200, 300], [500, 550]]), "ABP": both}
    recording = replace(recording, channels=tuple(replace(c, gaps=gaps[c.label]) for c in recording.channels))
    raw = RawCaval(recording, **QUIET)
    found = [(a["description"], a["onset"], a["duration"], a["ch_names"]) for a in raw.annotations]
    assert found == [("BAD_ACQ_SKIP", 2.0, 1.0, ()), ("BAD_CHANNEL/gap", 5.0, 0.5, ("CVP",))]
    data = raw.get_data()
    assert np.isnan(data[:, 200:300]).all()
    assert np.isnan(data[1, 500:550]).all()
    assert np.isnan(data).sum() == 350


def test_a_channel_that_starts_late_stands_in_its_place():
    recording = Recording.from_arrays({"ECG": (np.zeros(100), 100.0, "mV"), "CVP": (np.arange(50.0), 100.0, "mmHg")})
    skewed = replace(recording, channels=(recording.channels[0], replace(recording.channels[1], start_s=0.2)))
    cvp = RawCaval(skewed, **QUIET).get_data()[1]
    assert np.isnan(cvp[:20]).all()
    np.testing.assert_array_equal(cvp[20:70], np.arange(50.0))
    assert np.isnan(cvp[70:]).all()


def test_annotations_of_the_recording_come_along_with_their_channels(drawn):
    track = Track.build([1.5, 2.0, 4.25], ["", "fluid", "(AFIB"], channel=[0, -1, 1], extra={"symbol": np.array(["N", '"', "+"])})
    raw = RawCaval(replace(drawn.recording.with_track("atr", track), start_time=START), **QUIET)
    assert list(raw.annotations.description) == ["N", "fluid", "(AFIB"]
    np.testing.assert_allclose(raw.annotations.onset, [1.5, 2.0, 4.25])
    assert list(raw.annotations.ch_names) == [("ECG II",), (), ("CVP",)]


def test_a_copy_of_a_lazy_raw_shares_the_stored_channels(drawn):
    lazy = RawCaval(drawn.recording, **QUIET)
    assert lazy.copy()._raw_extras[0]["stored"] is lazy._raw_extras[0]["stored"]


def test_a_loaded_raw_survives_pickling_and_a_lazy_one_says_what_is_missing(raw, drawn):
    np.testing.assert_array_equal(pickle.loads(pickle.dumps(raw)).get_data(), raw.get_data())
    lazy = pickle.loads(pickle.dumps(RawCaval(drawn.recording, **QUIET)))
    with pytest.raises(CavalError, match="load_data"):
        lazy.get_data()


def test_filtering_goes_around_a_gap_of_all_channels(drawn):
    channels = tuple(replace(c, gaps=np.array([[10, 15]]) * int(c.sampling_rate)) for c in drawn.recording.channels)
    raw = RawCaval(replace(drawn.recording, channels=channels), preload=True, **QUIET)
    ecg = raw.filter(0.5, 40, picks=["ECG II"], **QUIET).get_data("ECG II")[0]
    assert np.isnan(ecg[5000:7500]).all()
    assert np.isfinite(ecg).sum() == len(ecg) - 2500


@pytest.mark.skipif("wfdb" not in registry.formats(), reason="the WFDB converter is not installed")
def test_read_raw_wfdb_of_a_record_that_wfdb_wrote(tmp_path, drawn):
    import wfdb

    ecg = drawn.recording.channel("ECG II").digital()[:5000]
    cvp = np.repeat(drawn.recording.channel("CVP").digital()[:1250], 4)
    wfdb.wrsamp(
        "rec", fs=500, units=["mV", "mmHg"], sig_name=["II", "CVP"], d_signal=np.column_stack([ecg, cvp]).astype(np.int64),
        fmt=["16", "16"], adc_gain=[1000.0, 100.0], baseline=[0, 0], base_time=START.time(), base_date=START.date(),
        write_dir=str(tmp_path),
    )
    raw = read_raw_wfdb(tmp_path / "rec.hea", preload=True, **QUIET)
    assert raw.get_channel_types() == ["ecg", "misc"]
    assert raw.info["meas_date"] == START.replace(tzinfo=UTC)  # to the microsecond, as in the header
    np.testing.assert_allclose(raw.get_data()[0], ecg * 1e-6, rtol=0, atol=1e-12)
    np.testing.assert_allclose(raw.get_data()[1], cvp / 100.0, rtol=0, atol=1e-9)
    with pytest.raises(CavalError, match="nowhere"):
        read_raw_wfdb(tmp_path / "nowhere", **QUIET)


# annotate_cvp


def test_annotations_stand_where_the_waves_were_drawn(annotations, drawn):
    assert annotations.orig_time == START.replace(tzinfo=UTC)
    for mark in "acxvy":
        found = annotations.onset[annotations.description == f"CVP/{mark}"]
        assert _near(found, _truth(drawn, mark)) >= 0.95
    assert set(annotations.description) >= {"CVP/a", "CVP/c", "CVP/x", "CVP/v", "CVP/y"}
    assert all(d.startswith(("CVP/", "BAD_", "RHYTHM/")) for d in annotations.description)


def test_every_annotation_names_its_channel(annotations):
    bad = [a for a in annotations if a["description"].startswith("BAD_CVP/")]
    assert bad  # the flush and the flat stretch
    assert all(a["ch_names"] == ("CVP",) and a["duration"] > 0 for a in bad)
    assert all(a["ch_names"] for a in annotations if not a["description"].startswith("RHYTHM/"))  # a rhythm is the heart's, not a channel's


def test_unusable_spans_reject_epochs_unless_told_not_to(raw, annotations):
    def kept(notes, channel):
        marked = raw.copy().set_annotations(notes)
        flat = next(a for a in notes if a["description"].endswith("CVP/flat"))
        samples = marked.first_samp + np.rint((flat["onset"] + np.array([1.0, 1.2])) * 500).astype(int)
        events = np.column_stack([samples, [0, 0], [1, 1]])
        return len(mne.Epochs(marked, events, tmin=-0.1, tmax=0.1, baseline=None, picks=[channel], preload=True, **QUIET))

    assert kept(annotations, "CVP") == 0
    plain = annotate_cvp(raw, mark_bad=False, **QUIET)
    assert "CVP/flat" in plain.description
    assert not any(d.startswith("BAD") for d in plain.description)
    assert kept(plain, "ECG II") == 2
    np.testing.assert_array_equal(plain.onset, annotations.onset)


def test_slash_tags_select_epochs(raw, annotations):
    marked = raw.copy().set_annotations(annotations)
    events, event_id = mne.events_from_annotations(marked, regexp="^CVP/", **QUIET)
    epochs = mne.Epochs(marked, events, event_id, tmin=-0.2, tmax=0.2, baseline=None, picks="misc", preload=True, **QUIET)
    assert len(epochs["a"]) > 30
    # An a wave is a maximum of 3 mmHg: at its own time it stands above both ends of the epoch.
    mean = epochs["a"].average(picks="misc").get_data(picks="CVP")[0]
    assert mean[100] > max(mean[0], mean[-1]) + 1.0
    assert len(epochs["CVP"]) == len(epochs)


def test_the_raw_is_not_changed(drawn):
    raw = RawCaval(drawn.recording, preload=True, **QUIET)
    data, notes = raw.get_data(), len(raw.annotations)
    annotate_cvp(raw, **QUIET)
    find_cvp_events(raw, **QUIET)
    np.testing.assert_array_equal(raw.get_data(), data)
    assert len(raw.annotations) == notes


@pytest.mark.parametrize("dated", [True, False])
def test_marks_of_a_cropped_raw_stand_at_the_same_samples(drawn, dated):
    """Both `first_samp` and `orig_time` nonzero, and `orig_time` None."""
    whole = RawCaval(replace(drawn.recording, start_time=START if dated else None), preload=True, **QUIET)
    part = whole.copy().crop(7.5, 29.0)
    assert part.first_samp == 3750
    notes = annotate_cvp(part, **QUIET)
    assert notes.orig_time == (START.replace(tzinfo=UTC) if dated else None)
    part.set_annotations(part.annotations + notes)
    events, event_id = mne.events_from_annotations(part, regexp="^CVP/v", **QUIET)
    assert list(event_id) == ["CVP/v"]
    truth = _truth(drawn, "v", 8.5, 28.0)
    assert _near(events[:, 0] / 500, truth) == 1.0  # samples count from the start of the whole recording
    found, _, _ = find_cvp_events(part, mark="v", **QUIET)
    np.testing.assert_allclose(found[:, 0], events[:, 0], atol=1)  # onsets are rounded by MNE and by us


def test_stretches_that_the_user_rejected_are_left_out(raw, drawn):
    note = {"onset": [10.0, 20.0], "duration": [5.0, 5.0], "description": ["BAD_handling", "bad ecg"], "orig_time": raw.info["meas_date"]}
    marked = raw.copy().set_annotations(mne.Annotations(**note, ch_names=[[], ["ECG II"]]))
    found = annotate_cvp(marked, **QUIET)
    waves = found.onset[[d.startswith("CVP/") for d in found.description]]
    assert not ((waves > 10) & (waves < 15)).any()
    assert _near(waves, _truth(drawn, "v", 20.5, 24.5)) == 1.0  # a bad stretch of the ECG alone: the artery shows the beats
    every = annotate_cvp(marked, reject_by_annotation=False, **QUIET)
    assert _near(every.onset, _truth(drawn, "v", 10.5, 14.5)) == 1.0


def test_the_channel_is_picked_by_label_by_name_or_refused(raw, annotations):
    renamed = raw.copy().rename_channels({"CVP": "P2"})
    with pytest.raises(InputError, match=r"annotate_cvp\(\): no venous-pressure channel.*'P2'.*Name it with ch_name"):
        annotate_cvp(renamed, **QUIET)
    by_name = annotate_cvp(renamed, ch_name="P2", ecg="ECG II", **QUIET)
    np.testing.assert_array_equal(by_name.onset, annotations.onset)
    bad = raw.copy()
    bad.info["bads"] = ["CVP"]
    with pytest.raises(InputError, match="no venous-pressure channel"):
        annotate_cvp(bad, **QUIET)
    with pytest.raises(InputError, match=r"annotate_cvp\(\): 'nope' not in channel list"):
        annotate_cvp(raw, ch_name="nope", **QUIET)
    with pytest.raises(InputError, match="'raw' must be an instance of"):
        annotate_cvp(np.zeros(5), **QUIET)
    with pytest.raises(InputError, match="'furlong'"):
        annotate_cvp(raw, unit="furlong", **QUIET)


def test_other_units_of_the_pressure_channels_are_converted(raw, annotations):
    water = raw.copy()
    water.apply_function(lambda p: p * 1.35951, picks=["CVP", "ABP"])  # 1 mmHg = 1.35951 cmH2O
    found = annotate_cvp(water, unit="cmH2O", **QUIET)
    np.testing.assert_array_equal(found.description, annotations.description)
    np.testing.assert_allclose(found.onset, annotations.onset, atol=0.002)  # a sample


def test_an_edf_file_as_mne_reads_it_everything_eeg(tmp_path, drawn):
    """MNE's EDF reader says eeg and V, keeps the numbers of mmHg, and resamples the slower channels."""
    import edfio

    signals = []
    for channel in drawn.recording.channels:
        assert channel.calibration is not None
        limits = channel.calibration
        signals.append(
            edfio.EdfSignal.from_digital(
                channel.digital(), channel.sampling_rate, label=channel.label, physical_dimension=channel.unit,
                physical_range=(limits.physical_min, limits.physical_max), digital_range=(limits.digital_min, limits.digital_max),
            )
        )
    edfio.Edf(signals, data_record_duration=1).write(tmp_path / "demo.edf")
    raw = mne.io.read_raw_edf(tmp_path / "demo.edf", **QUIET)
    assert set(raw.get_channel_types()) == {"eeg"}
    cvp = raw.get_data(picks="CVP")[0]
    assert abs(np.median(cvp) - np.median(drawn.recording.read("CVP"))) < 0.1  # mmHg as numbers
    found = annotate_cvp(raw, **QUIET)
    for mark in "axv":
        assert _near(found.onset[found.description == f"CVP/{mark}"], _truth(drawn, mark)) >= 0.95


# find_cvp_events, create_cvp_epochs


def test_events_have_the_shape_of_find_ecg_events(raw, drawn):
    events, ch_cvp, rate = find_cvp_events(raw, event_id=7, mark="v", **QUIET)
    ecg_events, ch_ecg, _ = mne.preprocessing.find_ecg_events(raw, **QUIET)
    assert events.dtype.kind == ecg_events.dtype.kind == "i"
    assert events.shape[1] == 3
    assert set(events[:, 2]) == {7}
    assert not events[:, 1].any()
    assert raw.ch_names[ch_cvp] == "CVP"
    assert raw.ch_names[ch_ecg] == "ECG II"
    assert 64 < rate < 76  # drawn at 72, over the time in which the trace could be read; beats cut by a span count for neither
    assert _near(events[:, 0] / 500, _truth(drawn, "v")) >= 0.95
    later, _, _ = find_cvp_events(raw, tstart=20.0, mark="v", **QUIET)
    assert len(later) == (events[:, 0] >= 20 * 500).sum()
    with pytest.raises(InputError, match="mark='q'; allowed: a, z, c, x, v, y, h"):
        find_cvp_events(raw, mark="q", **QUIET)


def test_readable_time_counts_overlapping_spans_once():
    from caval_mne.find_cvp_events import _readable

    assert _readable(np.array([5.0, 2.0, 20.0]), np.array([8.0, 6.0, 30.0]), 1.0, 25.0) == pytest.approx(1 + 12)
    assert _readable(np.empty(0), np.empty(0), 0.0, 60.0) == 60.0
    assert _readable(np.array([0.0]), np.array([99.0]), 0.0, 60.0) == 0.0


def test_epochs_keep_the_level_of_the_pressure(raw):
    epochs = create_cvp_epochs(raw, mark="a", tmin=-0.3, tmax=0.3, **QUIET)
    assert epochs.get_data().shape[1:] == (3, 301)
    assert epochs.baseline is None
    # drawn at 7 mmHg and a ventilator's 1.2 on top
    assert 6 < epochs.get_data(picks="CVP").mean() < 10


def test_a_line_without_waves_gives_no_events_and_says_so(drawn):
    arrays = {"ECG": (drawn.recording.read("ECG II"), 500.0, "mV"), "CVP": (np.full(7500, 4.0), 125.0, "mmHg")}
    raw = RawCaval(Recording.from_arrays(arrays), **QUIET)
    events, _, rate = find_cvp_events(raw, **QUIET)
    assert events.shape == (0, 3)
    assert rate == 0.0
    with pytest.raises(InputError, match=r"create_cvp_epochs\(\): no a wave was found"):
        create_cvp_epochs(raw, **QUIET)
