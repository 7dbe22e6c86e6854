"""The single-channel detectors: what they find does not depend on rate, size or start, and spikes are no complexes."""

import numpy as np
import pytest

from caval.model.ecg import ecg
from caval.model.rhythm import rhythm
from caval.recording import Signal
from caval.stages.detect import clean_ecg, qrs, thinned, upstroke

BEATS = rhythm("sinus", 60, heart_rate=75, seed=3)


def _nearest(found: np.ndarray, truth: np.ndarray) -> np.ndarray:
    return found[np.abs(found[None, :] - truth[:, None]).argmin(axis=1)] - truth


@pytest.mark.parametrize("sampling_rate", [125.0, 128.0, 200.0, 250.0, 360.0, 500.0, 1000.0])
def test_every_complex_at_every_rate(sampling_rate):
    found = qrs(Signal(ecg(BEATS, 60, sampling_rate, seed=2), sampling_rate))
    inner = BEATS.r_times_s[(BEATS.r_times_s > 0.3) & (BEATS.r_times_s < 59.7)]
    error = _nearest(found, inner)
    assert np.abs(error).max() < 0.008  # one sample of the thinned trace
    assert len(found) < 5 * len(inner)  # P, QRS, T and a little noise


def test_a_stretch_that_starts_elsewhere_has_the_same_events():
    trace = ecg(BEATS, 60, 500.0, seed=2)
    whole, later = qrs(Signal(trace, 500.0)), qrs(Signal(trace[5_003:], 500.0, start_s=5_003 / 500))
    inner = whole[(whole > 20) & (whole < 58)]
    assert np.abs(_nearest(later, inner)).max() < 1e-6


def test_thinned_samples_are_counted_from_the_start_of_the_record():
    trace = np.random.default_rng(0).standard_normal(4000)
    whole = thinned(Signal(trace, 500.0))
    part = thinned(Signal(trace[1001:], 500.0, start_s=1001 / 500))
    same = np.rint(whole.position(part.time_s)).astype(int)
    assert np.allclose(whole.position(part.time_s), same)
    assert np.allclose(part.values[10:-10], whole.values[same][10:-10])


def test_thinning_lets_through_no_harmonic_of_the_mains():
    time = np.arange(5000) / 500
    assert np.abs(thinned(Signal(np.sin(2 * np.pi * 100 * time), 500.0)).values[10:-10]).max() < 1e-9
    slow = thinned(Signal(np.sin(2 * np.pi * 5 * time), 500.0))
    assert np.abs(slow.values - np.sin(2 * np.pi * 5 * slow.time_s))[10:-10].max() < 0.02


@pytest.mark.parametrize("width", [1, 2, 3])
def test_pacing_spikes_go_and_complexes_stay(width):
    plain = ecg(BEATS, 60, 500.0, noise_mv=0.0)
    spiked = plain.copy()
    for at in np.rint((BEATS.r_times_s - 0.1) * 500).astype(int):
        spiked[at : at + width] += 5.0
    cleaned = clean_ecg(Signal(spiked, 500.0))[0].values
    assert np.abs(cleaned - plain).max() < 0.03  # what is left is less than a P wave
    assert np.abs(clean_ecg(Signal(plain, 500.0))[0].values - plain).max() < 1e-3


def test_a_gap_gives_no_event_and_a_dead_lead_none_at_all():
    trace = ecg(BEATS, 60, 500.0, seed=2)
    trace[10_000:15_000] = np.nan
    found = qrs(Signal(trace, 500.0))
    assert not ((found > 20.0) & (found < 29.99)).any()
    assert not len(qrs(Signal(np.full(5000, np.nan), 500.0)))
    assert not len(qrs(Signal(np.zeros(5000), 500.0)))
    assert not len(qrs(Signal(np.zeros(100), 500.0)))
    assert not len(upstroke(Signal(np.full(1000, 80.0), 125.0)))
