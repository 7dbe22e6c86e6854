"""Recording, Channel, Signal, Calibration: time, gaps, calibration, laziness."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from caval.errors import InputError
from caval.recording import Calibration, Channel, Recording, Signal
from caval.track import Track


def channel(values: np.ndarray, rate: float = 100.0, **more: object) -> Channel:
    return Channel("CVP", "mmHg", rate, len(values), lambda start, stop: values[start:stop], **more)  # type: ignore[arg-type]


@given(
    st.lists(st.floats(-100, 400), min_size=2, max_size=60), st.floats(0.5, 2000), st.floats(0, 1e5),
    st.lists(st.floats(0, 1), min_size=1, max_size=20),
)
def test_values_between_samples_are_those_of_numpy(values: list[float], rate: float, start_s: float, shares: list[float]) -> None:
    signal = Signal(np.asarray(values), rate, start_s)
    asked = start_s + np.asarray(shares) * (len(values) - 1) / rate
    position = (asked - start_s) * rate
    np.testing.assert_allclose(signal.at(asked), np.interp(position, np.arange(len(values)), values), rtol=0, atol=1e-6)


def test_no_value_outside_or_beside_a_missing_sample() -> None:
    signal = Signal(np.array([1.0, 2.0, np.nan, 4.0, 5.0]), 1.0, 10.0)
    got = signal.at([9.5, 10.0, 10.5, 11.0, 11.5, 12.5, 13.0, 14.0, 14.5])
    np.testing.assert_array_equal(got, [np.nan, 1.0, 1.5, 2.0, np.nan, np.nan, 4.0, 5.0, np.nan])
    assert np.isnan(Signal(np.empty(0), 1.0).at([0.0])).all()


@given(st.integers(-32768, 32766), st.integers(1, 65535), st.floats(-1000, 1000), st.floats(0.01, 1000))
def test_every_stored_code_survives_the_way_to_physical_and_back(low: int, steps: int, physical_min: float, reach: float) -> None:
    calibration = Calibration(low, low + steps, physical_min, physical_min + reach)
    codes = np.unique(np.linspace(low, low + steps, 50).astype(np.int64))
    np.testing.assert_array_equal(calibration.to_digital(calibration.to_physical(codes)), codes)


def test_calibration_at_the_ends_of_sixteen_bits() -> None:
    """int16 − (−32768) wraps silently on NumPy 2 unless it is cast first."""
    calibration = Calibration(-32768, 32767, -327.68, 327.67)
    np.testing.assert_allclose(calibration.to_physical(np.array([-32768, 0, 32767], np.int16)), [-327.68, 0.0, 327.67], atol=1e-9)


def test_missing_code_and_limits() -> None:
    calibration = Calibration(-100, 100, -10.0, 10.0, missing=-100)
    assert np.isnan(calibration.to_physical(np.array([-100]))[0])
    np.testing.assert_array_equal(calibration.to_digital(np.array([np.nan, 99.0, -99.0])), [-100, 100, -100])
    inverted = Calibration(-100, 100, 10.0, -10.0)
    np.testing.assert_array_equal(inverted.to_digital(inverted.to_physical(np.array([-100, 7, 100]))), [-100, 7, 100])


@given(st.floats(0, 20), st.floats(0, 20), st.sampled_from([62.4725, 100.0, 125.0, 500.0]))
def test_stretches_that_touch_share_no_sample_and_miss_none(first: float, second: float, rate: float) -> None:
    values = np.arange(round(15 * rate), dtype=float)
    one = channel(values, rate)
    start, stop = sorted((first, second))
    parts = [one.signal(a, b).values for a, b in ((0.0, start), (start, stop), (stop, None))]
    np.testing.assert_array_equal(np.concatenate(parts), values)


def test_a_stretch_starts_where_it_says() -> None:
    one = channel(np.arange(1000.0), 100.0, start_s=2.0)
    piece = one.signal(3.001, 4.0)
    assert piece.start_s == pytest.approx(3.01)
    assert piece.values[0] == 101
    assert piece.stop_s == pytest.approx(4.0)
    np.testing.assert_allclose(piece.time_s[[0, -1]], [3.01, 3.99])


def test_gaps_are_missing_whatever_the_source_says() -> None:
    one = channel(np.ones(10), gaps=np.array([[2, 4], [8, 10]]))
    np.testing.assert_array_equal(np.isnan(one.physical()), [0, 0, 1, 1, 0, 0, 0, 0, 1, 1])
    np.testing.assert_array_equal(np.isnan(one.physical(3, 9)), [1, 0, 0, 0, 0, 1])
    spans = Recording("r", (one,)).gaps()
    assert spans["onset_s"].tolist() == [0.02, 0.08]
    assert spans["duration_s"].tolist() == [0.02, 0.02]


def test_only_what_is_asked_for_is_read() -> None:
    asked: list[tuple[int, int]] = []

    def source(start: int, stop: int) -> np.ndarray:
        asked.append((start, stop))
        return np.zeros(stop - start)

    one = Channel("CVP", "mmHg", 100.0, 10**9, source)
    Recording("r", (one,)).read("CVP", 50.0, 51.0)
    assert asked == [(5000, 5100)]


def test_impossible_channels_and_stretches_are_refused() -> None:
    for rate in (0.0, -500.0, np.nan, np.inf):
        with pytest.raises(InputError, match="above 0"):
            channel(np.ones(3), rate)
    with pytest.raises(InputError, match="negative"):
        Channel("CVP", "mmHg", 1.0, -1, lambda *_: np.empty(0))
    with pytest.raises(InputError, match="samples 2 to 20 asked of 10"):
        channel(np.ones(10)).digital(2, 20)
    with pytest.raises(InputError, match=r"shape \(2, 2\)"):
        Recording.from_arrays({"CVP": (np.ones((2, 2)), 1.0, "mmHg")})


def test_channels_by_label_and_position() -> None:
    here = Recording.from_arrays({"ECG II": (np.zeros(4), 2.0, "mV"), "CVP": (np.zeros(10), 1.0, "mmHg")}, name="r")
    assert here.index("cvp ") == here.index(1) == 1
    assert here.duration_s == 10.0
    for wrong in ("P9", 2, -1):
        with pytest.raises(InputError, match="ECG II, CVP"):
            here.index(wrong)


def test_a_track_is_added_to_a_copy() -> None:
    here = Recording.from_arrays({"CVP": (np.zeros(10), 1.0, "mmHg")})
    more = here.with_track("atr", Track.build([1.0], ["x"])).with_track("atr", Track.build([0.5], ["y"]))
    assert not here.tracks
    assert list(more.tracks["atr"].text) == ["y", "x"]
    assert len(more.annotations) == 2
