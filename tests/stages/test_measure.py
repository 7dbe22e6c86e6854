"""Readings: closed-form cases."""

import numpy as np
import pandas as pd
import pytest

from caval import tables
from caval.api import given_beats
from caval.recording import Signal
from caval.stages.measure import measure


def _marks(rows):
    return pd.DataFrame(rows, columns=["time_s", "mark", "beat"]).assign(pressure_mmhg=0.0, confidence=1.0, state="clear")


def test_the_mean_of_a_ramp_is_its_middle():
    rate, slope = 125, 0.4
    cvp = Signal(5.0 + slope * np.arange(20 * rate) / rate, rate, label="CVP", unit="mmHg")
    beats = given_beats(np.arange(1.003, 18, 0.913))
    readings = measure(cvp, beats, tables.empty("marks"), tables.empty("spans"))
    r = beats["r_time_s"].to_numpy()
    assert np.allclose(readings["mean_mmhg"][:-1], 5.0 + slope * (r[:-1] + r[1:]) / 2, atol=1e-9)
    assert np.isnan(readings["mean_mmhg"].iloc[-1])


def test_a_sine_over_whole_cycles_has_the_mean_of_its_level():
    rate = 125
    cvp = Signal(8.0 + 3.0 * np.sin(2 * np.pi * np.arange(20 * rate) / rate), rate, label="CVP", unit="mmHg")
    readings = measure(cvp, given_beats(np.arange(1.0, 18.0)), tables.empty("marks"), tables.empty("spans"))
    assert np.allclose(readings["mean_mmhg"][:-1], 8.0, atol=1e-6)


def test_the_presystolic_nadir_lies_between_a_and_c():
    rate = 250
    time = np.arange(10 * rate) / rate
    cvp = Signal(10.0 - 2.0 * np.exp(-0.5 * ((time - 5.03) / 0.05) ** 2), rate, label="CVP", unit="mmHg")
    beats = given_beats([4.0, 5.0, 6.0])
    readings = measure(cvp, beats, _marks([(4.92, "a", 1), (5.12, "c", 1)]), tables.empty("spans"))
    assert readings["x_pre_mmhg"].iloc[1] == pytest.approx(8.0, abs=0.1)  # the 12 Hz low-pass fills a dip of 50 ms SD by about 2 %
    assert readings["x_pre_mmhg"].drop(1).isna().all()


def test_an_unusable_beat_has_a_reason_and_no_reading():
    cvp = Signal(np.full(1250, 8.0) + np.arange(1250) % 2, 125, label="CVP", unit="mmHg")
    spans = pd.DataFrame({"onset_s": [4.9], "duration_s": [0.3], "kind": ["noise"], "channel": ["CVP"], "detail": [""]})
    readings = measure(cvp, given_beats([3.0, 5.0, 7.0]), tables.empty("marks"), spans)
    assert list(readings["usable"]) == [True, False, True]
    assert readings["reason"].iloc[1] == "noise"
    assert np.isnan(readings["mean_mmhg"].iloc[1])
