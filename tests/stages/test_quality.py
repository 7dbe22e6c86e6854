"""Quality: what is dead, flat, cut, climbing or shaken is named, and a good trace is left alone."""

import numpy as np
import pytest

from caval.model.sketch import sketch
from caval.recording import Signal
from caval.stages.quality import quality

RATE = 125


@pytest.fixture
def trace():
    return sketch(minutes=3, events=False, seed=21).recording.channel("CVP").physical()


def _spans(values, **others):
    return quality(Signal(values, RATE, 0.0, "CVP", "mmHg"), **others)


def _covers(spans, kind, start_s, stop_s):
    mine = spans[spans["kind"] == kind]
    return ((mine["onset_s"] <= start_s + 0.5) & (mine["onset_s"] + mine["duration_s"] >= stop_s - 0.5)).any()


def test_a_good_trace_has_no_span(trace):
    assert len(_spans(trace)) == 0


def test_a_line_that_was_never_connected_is_disconnected_throughout():
    spans = _spans(np.full(60 * RATE, -50.0))
    assert list(spans["kind"]) == ["disconnected"]
    assert spans["duration_s"].iloc[0] == pytest.approx(60.0)


def test_a_line_open_to_air_at_zero_is_disconnected(trace):
    trace[60 * RATE : 80 * RATE] = 0.0
    assert _covers(_spans(trace), "disconnected", 62, 78)


def test_a_stuck_value_is_flat(trace):
    trace[60 * RATE : 70 * RATE] = trace[60 * RATE]
    assert _covers(_spans(trace), "flat", 60, 70)


def test_a_missing_stretch_is_a_gap(trace):
    trace[60 * RATE : 70 * RATE] = np.nan
    assert _covers(_spans(trace), "gap", 60, 70)


def test_a_cut_top_is_clipped_and_a_round_top_is_not(trace):
    assert "clipped" not in set(_spans(trace)["kind"])
    level = np.percentile(trace, 80)
    trace[60 * RATE : 70 * RATE] = np.minimum(trace[60 * RATE : 70 * RATE], level - 2)
    assert "clipped" in set(_spans(trace)["kind"])


def test_coarse_resolution_is_not_clipping(trace):
    assert "clipped" not in set(_spans(np.round(trace, 1))["kind"])


def test_a_flush_is_not_read_as_pressure(trace):
    trace[60 * RATE : round(61.5 * RATE)] = 300.0
    spans = _spans(trace)
    assert ((spans["onset_s"] <= 60.0) & (spans["onset_s"] + spans["duration_s"] >= 61.5)).any()


def test_a_line_that_climbs_steadily_is_implausible_from_its_foot(trace):
    climb = 200.0 * (1 - np.exp(-np.arange(60 * RATE) / RATE / 30.0))
    trace[100 * RATE : 160 * RATE] = trace[100 * RATE] + climb
    spans = _spans(trace)
    climbing = spans[spans["kind"] == "implausible"]
    assert climbing["onset_s"].min() == pytest.approx(100.0, abs=2.5)
    assert (climbing["onset_s"] + climbing["duration_s"]).max() >= 159.0


def test_breathing_is_not_climbing(trace):
    # ±6 mmHg with every deep breath of 5 s: large, but it turns.
    swing = 6.0 * np.sin(2 * np.pi * np.arange(len(trace)) / RATE / 5.0)
    assert "implausible" not in set(_spans(trace + swing)["kind"])


def test_handling_of_the_line_is_noise(trace):
    rng = np.random.default_rng(2)
    time = np.arange(4 * RATE) / RATE
    trace[60 * RATE : 64 * RATE] += 12 * np.sin(2 * np.pi * 4 * time + rng.uniform(0, 6))
    assert _covers(_spans(trace), "noise", 60, 64)


def test_the_place_of_a_span_moves_with_time(trace):
    trace[60 * RATE : 64 * RATE] += 12 * np.sin(np.arange(4 * RATE))
    here = _spans(trace)
    later = quality(Signal(trace, RATE, 30.0, "CVP", "mmHg"))
    assert np.allclose(later["onset_s"], here["onset_s"] + 30.0, atol=0.11)  # the thinned grid has a step of 0.1 s
