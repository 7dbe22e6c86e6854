"""ECG: R stands where it was asked for, P only where the atrium fires, and another project's detector agrees."""

from __future__ import annotations

import numpy as np
import pytest

from caval.errors import InputError
from caval.model.ecg import ecg, spike_times_s
from caval.model.rhythm import KINDS, rhythm, schedule

CALM = {"noise_mv": 0.0, "wander_mv": 0.0, "breath_share": 0.0}


def _around(trace: np.ndarray, times: np.ndarray, rate: float, before: float, after: float) -> np.ndarray:
    place = np.rint(times * rate).astype(int)
    offsets = np.arange(round(before * rate), round(after * rate))
    inside = (place + offsets[0] >= 0) & (place + offsets[-1] < len(trace))
    return trace[place[inside, None] + offsets]


@pytest.mark.parametrize("rate", [250, 500, 1000])
@pytest.mark.parametrize("kind", KINDS)
def test_the_peak_of_r_is_within_a_sample_of_its_time(kind: str, rate: int) -> None:
    beats = rhythm(kind, 30, seed=7)
    trace = ecg(beats, sampling_rate=rate, fibrillation_mv=0.0, **CALM)
    near = _around(trace, beats.r_times_s, rate, -0.06, 0.06)
    peak = near.argmax(axis=1) - round(0.06 * rate)
    # A wide R is so blunt that a P or T which happens to lie under it tilts its top by some milliseconds.
    slack = max(1, round(0.004 * rate)) if kind in ("complete_block", "paced", "ventricular_premature") else 1
    assert np.abs(peak).max() <= slack


def test_r_has_the_height_asked_for() -> None:
    beats = rhythm("sinus", 30)
    trace = ecg(beats, r_mv=2.0, **CALM)
    near = _around(trace, beats.r_times_s, 500, -0.02, 0.02)
    # Q and S lean on R, and the baseline of the model stands below 0 by the mean of the waves.
    np.testing.assert_allclose(near.max(axis=1), 2.0, rtol=0.12)


def _p_height(trace: np.ndarray, times: np.ndarray) -> np.ndarray:
    """Height of the mean beat, 35 to 75 ms after the activation, over its two sides."""
    mean = _around(trace, times, 500, -0.02, 0.13).mean(axis=0)
    return mean[27:48].mean() - 0.5 * (mean[:5].mean() + mean[-5:].mean())


def test_p_stands_at_its_atrial_activation_conducted_or_not() -> None:
    beats = rhythm("complete_block", 300, seed=2)
    trace = ecg(beats, **CALM)
    since = beats.p_times_s - beats.r_times_s[np.clip(np.searchsorted(beats.r_times_s, beats.p_times_s) - 1, 0, None)]
    free = beats.p_times_s[(since > 0.75) & (since < 1.35)]
    assert len(free) > 40
    assert _p_height(trace, free) == pytest.approx(0.09, abs=0.02)  # mV; a tenth of R, less what the two sides take


def test_no_p_in_fibrillation_but_waves_between() -> None:
    sinus = rhythm("sinus", 120, heart_rate=75)
    fibrillation = rhythm("fibrillation", 120, heart_rate=75)
    assert _p_height(ecg(sinus, **CALM), sinus.r_times_s - 0.16) > 0.05
    flat = ecg(fibrillation, fibrillation_mv=0.0, **CALM)
    waves = ecg(fibrillation, fibrillation_mv=0.1, **CALM) - flat
    long = fibrillation.r_times_s[1:][fibrillation.rr_s[1:] > 0.8]
    before = _around(flat, long, 500, -0.20, -0.09)
    assert np.ptp(before.mean(axis=0)) < 0.02
    power = np.abs(np.fft.rfft(waves)) ** 2
    hz = np.fft.rfftfreq(len(waves), 1 / 500)
    assert 4 < hz[power.argmax()] < 8
    assert 0.03 < waves.std() < 0.15


def test_fibrillatory_waves_only_while_the_atria_fibrillate() -> None:
    beats = schedule([{"onset_s": 0, "kind": "sinus"}, {"onset_s": 20, "kind": "fibrillation"}, {"onset_s": 40, "kind": "sinus"}], 60)
    waves = ecg(beats, fibrillation_mv=0.1, **CALM) - ecg(beats, fibrillation_mv=0.0, **CALM)
    assert not waves[: 20 * 500].any()
    assert not waves[40 * 500 + 1 :].any()
    assert waves[21 * 500 : 39 * 500].std() > 0.03


def test_ventricular_beats_are_wide() -> None:
    beats = rhythm("ventricular_premature", 300, seed=3)
    trace = ecg(beats, **CALM)
    width = {}
    for kind in ("normal", "premature"):
        mean = _around(trace, beats.r_times_s[beats.r_kind == kind], 500, -0.15, 0.15).mean(axis=0)
        width[kind] = np.count_nonzero(mean > 0.5 * mean.max()) / 500
    assert width["premature"] > 1.6 * width["normal"]


def test_a_spike_before_each_paced_beat_and_none_elsewhere() -> None:
    beats = rhythm("paced", 30)
    spikes = ecg(beats, spike_mv=1.0, **CALM) - ecg(beats, spike_mv=0.0, **CALM)
    place = np.flatnonzero(spikes) / 500
    expected = spike_times_s(beats)
    np.testing.assert_allclose(place, expected[expected >= 0], atol=0.5 / 500 + 1e-9)
    assert len(spike_times_s(rhythm("sinus", 30))) == 0


def test_breath_moves_baseline_and_height() -> None:
    beats = rhythm("sinus", 60)
    depth = np.r_[np.zeros(30 * 500), np.ones(30 * 500)]
    trace = ecg(beats, breath=depth, breath_share=0.2, wander_mv=0.3, noise_mv=0.0)
    span = np.ptp(_around(trace, beats.r_times_s, 500, -0.05, 0.06), axis=1)
    early, late = span[:20].mean(), span[-20:].mean()
    assert late / early == pytest.approx(0.8, rel=0.01)
    assert np.median(trace[30 * 500 :]) - np.median(trace[: 30 * 500]) == pytest.approx(0.3, abs=0.03)


@pytest.mark.parametrize("kind", ["sinus", "tachycardia", "first_degree_block", "fibrillation", "complete_block", "paced", "junctional"])
def test_the_detector_of_neurokit_finds_our_r(kind: str) -> None:
    import neurokit2 as nk

    beats = rhythm(kind, 60, seed=11)
    trace = ecg(beats, noise_mv=0.01, seed=2, spike_mv=0.2)
    found = nk.ecg_peaks(nk.ecg_clean(trace, sampling_rate=500), sampling_rate=500)[1]["ECG_R_Peaks"] / 500
    inner = beats.r_times_s[(beats.r_times_s > 1) & (beats.r_times_s < 59)]
    away = np.abs(found[None, :] - inner[:, None]).min(axis=1)
    assert (away < 0.05).mean() > 0.97  # a narrow tolerance against the 150 ms of EC57, and one beat in sixty may be lost
    if kind != "complete_block":  # in its long pauses this detector takes P waves for beats; not one of ours is lost
        assert len(found) <= len(beats.r_times_s) + 1


def test_a_normal_beat_looks_like_the_model_another_project_integrates() -> None:
    """NeuroKit2 integrates the same published equations: the mean beats, 0.35 s either side of R, resemble one another."""
    import neurokit2 as nk

    theirs = nk.ecg_simulate(duration=60, sampling_rate=500, heart_rate=60, heart_rate_std=0.5, noise=0, random_state=3, method="ecgsyn")
    their_r = nk.ecg_peaks(theirs, sampling_rate=500)[1]["ECG_R_Peaks"] / 500
    ours = ecg(rhythm("sinus", 60, heart_rate=60, pr_s=0.2), **CALM)
    beats = rhythm("sinus", 60, heart_rate=60, pr_s=0.2)
    one = _around(theirs, their_r[2:-2], 500, -0.10, 0.36).mean(axis=0)
    other = _around(ours, beats.r_times_s[2:-2], 500, -0.10, 0.36).mean(axis=0)
    assert np.corrcoef(one, other)[0, 1] > 0.9  # T is later there (100°, and set to the rate's power 3/4); P is left out: ours is narrower


def test_seeded_to_the_bit_and_never_in_the_wrong_length() -> None:
    beats = rhythm("fibrillation", 20)
    np.testing.assert_array_equal(ecg(beats, seed=3), ecg(beats, seed=3))
    assert (ecg(beats, seed=3) != ecg(beats, seed=4)).any()
    assert len(ecg(beats, 12.5, 250)) == 3125


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"sampling_rate": 50}, "sampling_rate = 50: it must be at least 100"),
        ({"noise_mv": -1}, "noise_mv = -1: it must be between 0 and 5"),
        ({"duration_s": 0}, "duration_s = 0"),
        ({"breath": np.zeros(3)}, "breath of 3 samples; the ECG has 5000"),
    ],
)
def test_a_bad_value_is_named_with_its_range(options: dict, words: str) -> None:
    with pytest.raises(InputError, match=words):
        ecg(rhythm("sinus", 10), **options)
