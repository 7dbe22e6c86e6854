"""Beats: against known R times, a host simulator and a host comparator; with a channel spoilt or missing."""

import neurokit2 as nk
import numpy as np
import pytest
import wfdb.processing

import caval
from caval.agree import match_events
from caval.model.sketch import sketch
from caval.recording import Recording

WINDOW_S = 0.15  # ANSI/AAMI EC57


def _with(recording: Recording, **changes: np.ndarray | None) -> Recording:
    """A copy with channels replaced (values in the channel's unit), or left out when None."""
    arrays = {}
    for channel in recording.channels:
        values = changes.get(channel.label.split()[0].lower(), channel.physical())
        if values is not None:
            arrays[channel.label] = (values, channel.sampling_rate, channel.unit)
    return Recording.from_arrays(arrays, name=recording.name)


def _beats(recording: Recording, **options: object) -> np.ndarray:
    return caval.mark(recording, stages=("anchors",), **options).beats["r_time_s"].to_numpy()


@pytest.fixture(scope="module")
def drawn():
    return sketch(minutes=2, events=False, seed=3)


@pytest.mark.parametrize("heart_rate", [45, 72, 120, 160])
def test_every_beat_of_a_clean_record_is_found_within_a_sample(heart_rate):
    truth = sketch(minutes=1, heart_rate=heart_rate, events=False, seed=heart_rate)
    agreement = match_events(truth.r_times_s, found := _beats(truth.recording), window_s=WINDOW_S)
    inside = [i for i in agreement.missed if 0.3 < truth.r_times_s[i] < 59.7]  # a beat cut by the edge may be lost
    assert not inside
    assert not len(agreement.extra)
    error = found[agreement.found] - truth.r_times_s[agreement.reference]
    assert np.abs(error).max() < 0.006  # three samples at 500 Hz: noise moves a sampled maximum


def test_r_peaks_of_the_hosts_simulator_are_found():
    # neurokit2.ecg_simulate (McSharry's dynamical model); its R peaks are the maxima of the noise-free trace, one a cycle.
    clean = nk.ecg_simulate(duration=60, sampling_rate=500, heart_rate=75, noise=0, method="ecgsyn", random_state=7)
    peaks = np.array([i for i in nk.signal_findpeaks(clean, height_min=0.6 * clean.max())["Peaks"]])
    noisy = nk.signal_distort(clean, sampling_rate=500, noise_amplitude=0.05, noise_frequency=[5, 50], random_state=7, silent=True)
    flat_cvp = np.full(len(clean) // 4, 6.0)
    found = _beats(Recording.from_arrays({"ECG": (noisy, 500, "mV"), "CVP": (flat_cvp, 125, "mmHg")}))
    found = found[(found > peaks[0] / 500 - 0.3) & (found < peaks[-1] / 500 + 0.3)]  # a complex cut by the edge has no known peak
    agreement = match_events(peaks / 500, found, window_s=WINDOW_S)
    assert agreement.sensitivity >= 0.98
    assert agreement.precision == 1.0
    assert np.median(np.abs(found[agreement.found] - peaks[agreement.reference] / 500)) <= 0.002


def test_matching_agrees_with_wfdbs_comparator():
    rng = np.random.default_rng(5)
    reference = np.cumsum(rng.uniform(0.5, 1.1, 400))
    kept = reference[rng.random(400) > 0.1]
    found = np.sort(np.concatenate([kept + rng.normal(0, 0.05, len(kept)), rng.uniform(0, reference[-1], 30)]))
    ours = match_events(reference, found, window_s=WINDOW_S)
    in_ms = [np.rint(times * 1000).astype(int) for times in (reference, found)]
    theirs = wfdb.processing.compare_annotations(*in_ms, int(WINDOW_S * 1000))
    # wfdb lets each reference take its nearest first; a contested pair may fall differently, one in a hundred at these densities
    assert len(ours.reference) == pytest.approx(theirs.tp, abs=4)
    assert len(ours.missed) == pytest.approx(theirs.fn, abs=4)
    assert len(ours.extra) == pytest.approx(theirs.fp, abs=4)


def test_wfdbs_comparator_counts_our_beats_as_right(drawn):
    found = _beats(drawn.recording)
    count = wfdb.processing.compare_annotations(np.rint(drawn.r_times_s * 500).astype(int), np.rint(found * 500).astype(int), 75)
    assert count.sensitivity >= 0.99
    assert count.positive_predictivity == 1.0


def test_diathermy_neither_costs_nor_invents_beats_while_the_artery_shows_them(drawn):
    ecg = drawn.recording.channel("ECG II").physical()
    rng = np.random.default_rng(0)
    for start in (20, 50, 80):
        ecg[start * 500 : (start + 7) * 500] += 2.0 * rng.standard_normal(3500)
    agreement = match_events(drawn.r_times_s, _beats(_with(drawn.recording, ecg=ecg)), window_s=0.1)
    assert agreement.sensitivity >= 0.985
    assert agreement.precision >= 0.985


def test_an_ecg_lead_that_falls_off_costs_no_beat(drawn):
    ecg = drawn.recording.channel("ECG II").physical()
    ecg[30 * 500 : 60 * 500] = 0.0
    result = caval.mark(_with(drawn.recording, ecg=ecg), stages=("anchors",))
    agreement = match_events(drawn.r_times_s, result.beats["r_time_s"].to_numpy(), window_s=0.1)
    assert agreement.sensitivity >= 0.985
    assert agreement.precision >= 0.985
    on, off = (result.beats[result.beats["r_time_s"].between(31, 59) == away] for away in (False, True))
    assert set(off["source"]) == {"abp"}
    assert off["r_sd_s"].min() > on["r_sd_s"].median()


def test_a_beat_without_a_pulse_stays_while_the_ecg_is_quiet(drawn):
    beat = 40
    abp = drawn.recording.channel("ABP").physical()
    first, last = (round((drawn.r_times_s[beat + k] + 0.17) * 125) for k in (0, 1))
    abp[first:last] = np.linspace(abp[first], abp[last], last - first)
    found = _beats(_with(drawn.recording, abp=abp))
    assert np.abs(found - drawn.r_times_s[beat]).min() < 0.01


def test_without_an_ecg_the_artery_gives_the_beats(drawn):
    result = caval.mark(_with(drawn.recording, ecg=None), stages=("anchors",))
    agreement = match_events(drawn.r_times_s, result.beats["r_time_s"].to_numpy(), window_s=0.1)
    assert agreement.sensitivity >= 0.98
    assert agreement.precision >= 0.98
    assert set(result.beats["source"]) == {"abp"}
    assert any("no ECG" in said for said in result.warnings)


def test_with_nothing_that_beats_there_are_no_beats_and_a_reason(drawn):
    noise = 8.0 + np.random.default_rng(2).standard_normal(120 * 125)
    for cvp in (noise, np.full(120 * 125, 8.0)):
        result = caval.mark(_with(drawn.recording, ecg=None, abp=None, cvp=cvp))
        assert len(result.beats) == 0
        assert len(result.marks) == 0
        assert any("no beats" in said for said in result.warnings)


@pytest.mark.parametrize("change", ["polarity", "scale", "offset", "artery_scale"])
def test_beats_do_not_depend_on_the_leads_sign_size_or_level(drawn, change):
    ecg, abp = drawn.recording.channel("ECG II").physical(), drawn.recording.channel("ABP").physical()
    plain = _beats(_with(drawn.recording))
    changed = {
        "polarity": {"ecg": -ecg}, "scale": {"ecg": 37.0 * ecg}, "offset": {"ecg": ecg + 460.0}, "artery_scale": {"abp": 0.6 * abp},
    }[change]
    found = _beats(_with(drawn.recording, **changed))
    assert len(found) == len(plain)
    assert np.abs(found - plain).max() < 0.025  # the learned transit or the turned QRS may move an arterial beat


def test_pure_noise_gives_hardly_any_beat():
    rng = np.random.default_rng(1)
    recording = Recording.from_arrays(
        {"ECG": (0.01 * rng.standard_normal(30000), 500, "mV"), "CVP": (rng.standard_normal(7500), 125, "mmHg")}
    )
    rate_per_min = len(_beats(recording))
    assert rate_per_min < 40  # no heart beat is claimed at a plausible resting rate


def test_given_beats_stand_as_they_are(drawn):
    result = caval.mark(drawn.recording, beats=drawn.r_times_s)
    assert np.array_equal(result.beats["r_time_s"], drawn.r_times_s)
    assert set(result.beats["source"]) == {"given"}
    assert {"a", "c", "x", "v", "y"} <= set(result.marks["mark"])
