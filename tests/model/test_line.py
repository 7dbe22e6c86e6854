"""The measuring line: an exact second-order system, events that look like events, and a ring that tells the line."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from caval.errors import InputError
from caval.model.events import BloodSampling, Clot, Diathermy, Disconnection, Flush, HeightStep, Movement, Zeroing, spoil_ecg
from caval.model.line import MMHG_PER_CM_BLOOD, Line, measure
from caval.model.ring import fast_flush, find_ring, ring_response
from caval.recording import Calibration

RATE = 500
QUIET = {"noise_mmhg": 0.0}
FINE = Calibration(-(2**30), 2**30, -400.0, 400.0)
"""Steps of 4e-7 mmHg: quantisation out of the way."""


def _pulse(seconds: float, rate: float = RATE) -> np.ndarray:
    time = np.arange(round(seconds * rate)) / rate
    return 8 + 2.5 * np.sin(2 * np.pi * 1.2 * time) + 1.0 * np.sin(2 * np.pi * 2.4 * time + 0.7)


# ------------------------------------------------------------------ published check values


def test_the_worked_example_of_the_fast_flush() -> None:
    """Miller, Anesthesia 6e, fig. 32-11: 25 mm/s, a period of 1.7 mm, swings of 24 and 17 mm: 14.7 Hz, 0.71, 0.11."""
    ring_hz, ratio = 25 / 1.7, 17 / 24
    assert round(ring_hz, 1) == 14.7
    assert round(ratio, 2) == 0.71
    f_n, zeta = fast_flush(ring_hz, ratio)
    assert round(zeta, 2) == 0.11
    assert f_n == pytest.approx(ring_hz / np.sqrt(1 - zeta**2))
    assert f_n == pytest.approx(14.7, rel=0.01)  # the figure takes the ring's frequency for the natural one


@pytest.mark.parametrize(
    ("ratio", "zeta"),
    [(0.1, 0.591), (0.2, 0.456), (0.3, 0.358), (0.4, 0.280), (0.5, 0.215), (0.6, 0.160), (0.7, 0.113), (0.8, 0.071), (0.9, 0.034)],
)
def test_ratio_to_damping(ratio: float, zeta: float) -> None:
    """Table computed from the formula, facts section 4; three decimals."""
    assert fast_flush(10, ratio)[1] == pytest.approx(zeta, abs=0.0006)


@pytest.mark.parametrize(("f_n", "zeta", "milliseconds"), [(10, 0.2, 6), (10, 0.6, 19), (5, 0.7, 45)])
def test_low_frequency_delay(f_n: float, zeta: float, milliseconds: float) -> None:
    """2ζ/ω_n, and a slow wave through the simulated line is that late."""
    line = Line(f_n, zeta, delay_s=0.0, lowpass_hz=None, **QUIET)
    assert 1000 * line.low_frequency_delay_s == pytest.approx(milliseconds, abs=0.6)
    time = np.arange(20 * RATE) / RATE
    out = measure(np.sin(2 * np.pi * 0.5 * time), RATE, line, sampling_rate=RATE, calibration=FINE).mmhg[10 * RATE :]
    phase = np.angle(np.exp(-2j * np.pi * 0.5 * time[10 * RATE :]) @ out) + np.pi / 2
    assert -phase / (2 * np.pi * 0.5) == pytest.approx(line.low_frequency_delay_s, rel=0.03)  # at a tenth of f_n and less it holds to 3 %


@pytest.mark.parametrize(("f_n", "zeta", "gain"), [(7, 0.2, 1.76), (10, 0.2, 1.29), (24, 0.3, 1.04)])
def test_gain_at_five_hertz(f_n: float, zeta: float, gain: float) -> None:
    """Table computed from the formula, facts section 4; and the simulated line does it."""
    line = Line(f_n, zeta, delay_s=0.0, lowpass_hz=None, **QUIET)
    assert float(line.gain(5.0)) == pytest.approx(gain, abs=0.006)
    time = np.arange(10 * 1000) / 1000
    out = measure(np.sin(2 * np.pi * 5 * time), 1000, line, sampling_rate=1000, calibration=FINE).mmhg[5000:]
    amplitude = 2 * np.abs(np.exp(-2j * np.pi * 5 * time[5000:]) @ out) / 5000
    assert amplitude == pytest.approx(float(line.gain(5.0)), rel=3e-4)  # straight lines between 200 samples a period lose (π/200)²/3


# ------------------------------------------------------------------ the system is exact


def test_the_column_solves_its_equation() -> None:
    """Against SciPy's integrator with tight tolerances, for an input that is straight between samples."""
    rng = np.random.default_rng(1)
    u = np.repeat(rng.normal(8, 3, 20), 10)
    line = Line(12, 0.3, delay_s=0.0, lowpass_hz=None, range_mmhg=(-400, 400), **QUIET)
    out = measure(u, 100, line, sampling_rate=100, calibration=FINE).clean_mmhg
    omega, time = 2 * np.pi * 12, np.arange(len(u)) / 100

    def slope(t: float, x: np.ndarray) -> list[float]:
        return [x[1], omega**2 * (np.interp(t, time, u) - x[0]) - 2 * 0.3 * omega * x[1]]

    exact = solve_ivp(slope, (0, time[-1]), [u[0], 0.0], t_eval=time, rtol=1e-9, atol=1e-9, max_step=0.005).y[0]
    np.testing.assert_allclose(out, exact, atol=1e-5)


@pytest.mark.parametrize(("f_n", "zeta"), [(14.7, 0.11), (10.0, 0.6), (5.0, 1.0), (8.0, 2.0)])
def test_the_ring_in_closed_form_is_the_rings_of_the_line(f_n: float, zeta: float) -> None:
    source = np.r_[np.full(100, 1.0), np.zeros(900)]
    line = Line(f_n, zeta, delay_s=0.0, lowpass_hz=None, **QUIET)
    rate = 1000
    out = measure(source, rate, line, sampling_rate=rate, calibration=FINE).clean_mmhg
    # Let go along a straight line of one sample: to second order that is a step half a sample later.
    expected = ring_response(f_n, zeta, (np.arange(1000) - 99.5) / rate)
    np.testing.assert_allclose(out, expected, atol=(2 * np.pi * f_n / rate) ** 2 / 20)


def test_the_response_does_not_depend_on_the_rate() -> None:
    slow, fast = _pulse(10, 250), np.interp(np.arange(5000) / 500, np.arange(2500) / 250, _pulse(10, 250))
    line = Line(14, 0.2, **QUIET)
    one = measure(slow, 250, line, sampling_rate=125, calibration=FINE).clean_mmhg
    other = measure(fast, 500, line, sampling_rate=125, calibration=FINE).clean_mmhg
    # What is left is the low-pass, which takes the column's curved output as straight between samples: 2nd order in the step.
    np.testing.assert_allclose(one[:-1], other[: len(one) - 1], atol=5e-3)


def test_the_mean_does_not_care_about_damping() -> None:
    """Gardner 1981: the mean is hardly affected by damping."""
    pressure = _pulse(50)[: 48 * RATE]
    means = [measure(pressure, RATE, Line(f, z, **QUIET)).mmhg[125 * 8 :].mean() for f, z in ((20, 0.1), (5, 0.7), (3, 1.5))]
    np.testing.assert_allclose(means, 8.0, atol=0.02)


def test_delay_moves_the_trace_and_nothing_else() -> None:
    line = dict(natural_frequency_hz=15, damping=0.4, lowpass_hz=None, **QUIET)
    still = measure(_pulse(20), RATE, Line(delay_s=0.0, **line), sampling_rate=RATE, calibration=FINE).clean_mmhg
    late = measure(_pulse(20), RATE, Line(delay_s=0.024, **line), sampling_rate=RATE, calibration=FINE).clean_mmhg
    np.testing.assert_allclose(late[12:], still[:-12], atol=1e-9)
    half = measure(_pulse(20), RATE, Line(delay_s=0.025, **line), sampling_rate=RATE, calibration=FINE).clean_mmhg
    np.testing.assert_allclose(half[13:], 0.5 * (still[:-13] + still[1:-12]), atol=1e-3)  # half a sample: between the two


# ------------------------------------------------------------------ statics


def test_height_offset_and_quantisation() -> None:
    coarse = Calibration(-1000, 1000, -100.0, 100.0)
    line = Line(height_cm=10.0, offset_mmhg=2.0, **QUIET)
    got = measure(np.full(1000, 8.0), RATE, line, calibration=coarse)
    assert got.clean_mmhg[0] == pytest.approx(8.0 + 2.0 - 7.76, abs=0.01)  # 10 cm of blood of 1.055 g/ml are 7.76 mmHg
    assert 0.772 < MMHG_PER_CM_BLOOD < 0.780
    assert got.digital.dtype == np.int64
    np.testing.assert_allclose(got.mmhg, np.round(got.clean_mmhg, 1), atol=1e-9)


def test_noise_has_its_size_and_its_seed() -> None:
    flat = np.full(60 * RATE, 8.0)
    one = measure(flat, RATE, Line(noise_mmhg=0.3), seed=4)
    assert one.mmhg.std() == pytest.approx(0.3, rel=0.03)  # 7500 samples: standard error 0.8 %
    np.testing.assert_array_equal(one.digital, measure(flat, RATE, Line(noise_mmhg=0.3), seed=4).digital)
    assert (one.digital != measure(flat, RATE, Line(noise_mmhg=0.3), seed=5).digital).any()
    np.testing.assert_allclose(one.clean_mmhg, 8.0, atol=1e-9)


# ------------------------------------------------------------------ events


@pytest.mark.parametrize("rate", [125, 250, 500])
@pytest.mark.parametrize(("f_n", "zeta"), [(14, 0.25), (10, 0.20), (24, 0.15), (8, 0.40), (30, 0.10), (14.7, 0.11), (7, 0.6)])
def test_the_ring_of_a_flush_gives_back_the_line(f_n: float, zeta: float, rate: int) -> None:
    got = measure(_pulse(40), RATE, Line(f_n, zeta), [Flush(20.0, 1.5)], sampling_rate=rate, seed=3)
    ring = find_ring(got.mmhg, rate, 21.5 + 0.02 + got.delay_s + 0.01)
    assert ring is not None
    # The pulse under the ring (7 mmHg, 1.2 and 2.4 Hz) limits it: some tenths of a mmHg of it are left on a ring of 300.
    assert ring.natural_frequency_hz == pytest.approx(f_n, rel=0.02)
    assert ring.damping == pytest.approx(zeta, abs=0.01)
    assert fast_flush(ring.ring_hz, ring.ratio)[1] == pytest.approx(ring.damping, abs=1e-9)


def test_a_flush_stands_at_the_bag_cut_by_the_monitor() -> None:
    got = measure(_pulse(40), RATE, Line(range_mmhg=(-40, 250)), [Flush(20.0, 1.5, bag_mmhg=300)])
    plateau = got.mmhg[round(20.3 * 125) : round(21.4 * 125)]
    np.testing.assert_allclose(plateau, 250.0, atol=0.01)
    assert got.clean_mmhg[round(21.3 * 125)] == pytest.approx(300.0, abs=0.5)
    assert got.mmhg.min() >= -40.0 - 1e-9
    after = slice(round((got.spans["onset_s"] + got.spans["duration_s"])[0] * 125), None)
    clean = measure(_pulse(40), RATE, Line(range_mmhg=(-40, 250))).clean_mmhg
    np.testing.assert_allclose(got.clean_mmhg[after], clean[after], atol=0.7)  # the span lasts until 0.5 mmHg of the ring is left


def test_no_ring_in_a_damped_line_and_none_without_a_flush() -> None:
    damped = measure(_pulse(40), RATE, Line(8, 1.2), [Flush(20.0, 1.5)])
    assert find_ring(damped.mmhg, 125, 21.53 + damped.delay_s) is None
    assert find_ring(measure(_pulse(40), RATE).mmhg, 125, 21.5) is None
    assert find_ring(np.full(3, 8.0), 125, 0.0) is None


def test_zeroing_reads_the_offset_then_nothing_and_takes_it_away() -> None:
    got = measure(_pulse(60), RATE, Line(offset_mmhg=4.0, **QUIET), [Zeroing(20.0, 6.0)])
    assert got.mmhg[(22 * 125)] == pytest.approx(4.0, abs=0.01)
    assert got.mmhg[(25 * 125)] == pytest.approx(0.0, abs=0.01)
    plain = measure(_pulse(60), RATE, Line(**QUIET))
    np.testing.assert_allclose(got.mmhg[30 * 125 :], plain.mmhg[30 * 125 :], atol=0.011)
    kept = measure(_pulse(60), RATE, Line(offset_mmhg=4.0, **QUIET), [Zeroing(20.0, 6.0, resets=False)])
    np.testing.assert_allclose(kept.mmhg[30 * 125 :], plain.mmhg[30 * 125 :] + 4.0, atol=0.011)


def test_sampling_is_flat_and_disconnection_has_no_pulse() -> None:
    got = measure(_pulse(60), RATE, Line(**QUIET), [BloodSampling(10.0, 8.0), Disconnection(30.0, 10.0, level_mmhg=-3.0)])
    sampled, open_ = got.mmhg[11 * 125 : 18 * 125], got.mmhg[31 * 125 : 40 * 125]
    assert np.ptp(sampled) <= 0.0101  # one step of the recorder
    assert 3 < sampled[0] < 13
    np.testing.assert_allclose(open_, -3.0, atol=0.011)
    creeping = measure(_pulse(60), RATE, Line(**QUIET), [BloodSampling(10.0, 8.0, creep_mmhg_per_s=2.0)]).mmhg[11 * 125 : 18 * 125]
    assert (creeping[-1] - creeping[0]) / 7 == pytest.approx(2.0, rel=0.01)


def test_a_clot_damps_while_it_lasts_and_the_trace_does_not_jump() -> None:
    got = measure(_pulse(60), RATE, Line(**QUIET), [Clot(20.0, 20.0, natural_frequency_hz=1.0, damping=2.0)], calibration=FINE)
    free, clotted = np.ptp(got.mmhg[5 * 125 : 19 * 125]), np.ptp(got.mmhg[24 * 125 : 39 * 125])
    assert clotted < 0.4 * free
    steepest = 2 * np.pi * (2.5 * 1.2 + 1.0 * 2.4) / 125  # a sample of the steepest pulse
    step = np.abs(np.diff(got.mmhg))
    assert step[: 39 * 125].max() < 1.2 * steepest  # 20 %: what a line of 14 Hz and a free ring as the clot sets in add
    # When it lets go the column runs to the vessel's pressure, at most half a pulse away, no faster than it can.
    assert step.max() < steepest + 3.5 * 2 * np.pi * 14 / 125 / 2
    np.testing.assert_allclose(got.mmhg[42 * 125 :], measure(_pulse(60), RATE, Line(**QUIET), calibration=FINE).mmhg[42 * 125 :], atol=1e-4)


def test_a_step_in_height_stays() -> None:
    got = measure(np.full(60 * RATE, 8.0), RATE, Line(**QUIET), [HeightStep(20.0, 2.0, height_cm=-10.0)], calibration=FINE)
    assert got.mmhg[19 * 125] == pytest.approx(8.0, abs=1e-5)
    assert got.mmhg[21 * 125] == pytest.approx(8.0 + 5 * MMHG_PER_CM_BLOOD, abs=0.2)  # half-way, less the line's delay
    assert got.mmhg[-1] == pytest.approx(8.0 + 10 * MMHG_PER_CM_BLOOD, abs=1e-5)


def test_movement_shakes_the_record_and_not_the_truth() -> None:
    moved = measure(_pulse(60), RATE, Line(**QUIET), [Movement(20.0, 10.0, amplitude_mmhg=10.0)], seed=2)
    still = measure(_pulse(60), RATE, Line(**QUIET))
    np.testing.assert_allclose(moved.clean_mmhg, still.clean_mmhg, atol=1e-9)
    shaken = moved.mmhg - still.mmhg
    assert 4 < shaken[21 * 125 : 29 * 125].std() < 15
    assert np.abs(shaken[: 20 * 125]).max() < 1e-6
    assert np.abs(shaken[32 * 125 :]).max() < 0.02


def test_spans_name_what_happened_and_cover_it() -> None:
    events = [Zeroing(40.0, 5.0), Flush(20.0, 1.0), Clot(10.0, 5.0), Movement(30.0, 2.0), Diathermy(2.0, 3.0)]
    spans = measure(_pulse(60), RATE, Line(), events, channel="CVP1").spans
    assert list(spans["kind"]) == ["damped", "flush", "noise", "zeroing"]
    assert list(spans["onset_s"]) == [10.0, 20.0, 30.0, 40.0]
    assert set(spans["channel"]) == {"CVP1"}
    assert (spans["duration_s"] >= [5.0, 1.0, 2.0, 5.0]).all()


def test_diathermy_spoils_the_ecg_where_it_is_and_leaves_the_pressure_alone() -> None:
    flat = np.zeros(30 * RATE)
    spoiled = spoil_ecg(flat, RATE, [Diathermy(10.0, 5.0, amplitude_mv=2.0), Flush(1.0, 1.0)], seed=1)
    assert not flat.any()
    assert not spoiled[: 10 * RATE].any()
    assert not spoiled[15 * RATE :].any()
    assert 0.4 < spoiled[10 * RATE : 15 * RATE].std() < 4
    np.testing.assert_array_equal(spoiled, spoil_ecg(flat, RATE, [Diathermy(10.0, 5.0, amplitude_mv=2.0)], seed=1))
    clean = measure(_pulse(30), RATE, Line(**QUIET)).digital
    np.testing.assert_array_equal(measure(_pulse(30), RATE, Line(**QUIET), [Diathermy(10.0, 5.0)]).digital, clean)


# ------------------------------------------------------------------ errors


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Line(natural_frequency_hz=0), "natural_frequency_hz = 0: it must be between 1 and 200 Hz"),
        (lambda: Line(damping=-0.1), "damping = -0.1: it must be between 0.02 and 5"),
        (lambda: Line(range_mmhg=(10, 0)), "range_mmhg"),
        (lambda: Flush(-1.0, 1.0), "onset_s = -1.0: it must be 0 or more s"),
        (lambda: Flush(1.0, 1.0, bag_mmhg=900), "bag_mmhg = 900"),
        (lambda: Clot(1.0, float("inf")), "duration_s = inf"),
        (lambda: fast_flush(10, 1.2), "ratio = 1.2: it must be above 0 and below 1"),
        (lambda: measure(_pulse(5), RATE, Line(), [Flush(9.0, 1.0)]), "Flush at 9 s: the record ends at 5 s"),
        (lambda: measure(_pulse(5), 50, Line(20.0), sampling_rate=50), "needs at least 80 Hz"),
        (lambda: measure(_pulse(5), RATE, Line(), sampling_rate=1000), "sampling_rate = 1000 Hz"),
        (lambda: measure(np.array([1.0, np.nan]), RATE), "all finite"),
    ],
)
def test_a_bad_value_is_named_with_its_range(make, words: str) -> None:
    with pytest.raises(InputError, match=words):
        make()
