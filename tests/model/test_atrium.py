"""The way back: closed-form cases, invariance, coverage of the intervals, and plain words when the trace cannot tell."""

from __future__ import annotations

import sys

import numpy as np
import pytest

from caval.errors import InputError
from caval.model.atrium import Challenge, Interval, explain, height_of, wave_height
from caval.model.compliance import cutoff, effective_compliance

GRID = 0.01
"""Ends of ranges are found between points 0.3 and 0.4 % apart, heights in steps of 1/12 SD; 1 % is generous."""


# ------------------------------------------------------------------ forward


def test_the_same_regurgitant_volume_in_a_small_stiff_and_a_large_soft_atrium() -> None:
    """40 ml: enormous in 1.5 ml/mmHg, modest in 10 ml/mmHg."""
    stiff, soft = wave_height(40, [1.5, 10.0])
    assert stiff == pytest.approx(26.7, abs=0.05)
    assert soft == pytest.approx(4.0)
    assert stiff > 25
    assert soft < 5


def test_a_wall_that_stiffens_makes_a_taller_wave_and_tends_to_the_straight_one() -> None:
    volume = np.array([5.0, 20.0, 60.0])
    straight, stiffening = wave_height(volume, 4.0), wave_height(volume, 4.0, stiffening_per_ml=0.02)
    np.testing.assert_allclose(stiffening, np.expm1(0.02 * volume) / (0.02 * 4.0))
    assert (stiffening > straight).all()
    assert (np.diff(stiffening / straight) > 0).all()
    np.testing.assert_allclose(wave_height(volume, 4.0, stiffening_per_ml=1e-9), straight, rtol=1e-6)


def test_intervals() -> None:
    assert Interval(8.0, 12.0).sd == pytest.approx(4 / (2 * 1.959964))
    assert Interval.of(10, 2).value == 10
    assert Interval.of(10, 2).sd == pytest.approx(2)
    difference = Interval.of(90, 4).minus(Interval.of(50, 3))
    assert (difference.value, difference.sd) == (pytest.approx(40), pytest.approx(5))
    heights = np.array([9.0, 10.0, 11.0, np.nan, 10.0])
    assert height_of(heights).value == pytest.approx(10.0)
    assert height_of(heights).high - 10.0 == pytest.approx(3.182 * np.sqrt(2 / 3) / 2, rel=1e-3)  # t of 3 degrees, table value 3.182
    assert cutoff(0.95) == pytest.approx(3.8415, abs=1e-4)


# ------------------------------------------------------------------ backward: closed forms


def test_the_trace_alone_is_the_band_of_its_quotients_and_says_so() -> None:
    found = explain(Interval(8, 12))
    quotient = found.volume_ml[None, :] / found.compliance_ml_per_mmhg[:, None]
    np.testing.assert_array_equal(found.inside(), (quotient >= 8) & (quotient <= 12))
    assert found.volume_bounds == found.compliance_bounds == (False, False)
    assert found.volume_range_ml == (pytest.approx(2), pytest.approx(200))
    assert found.compliance_range_ml_per_mmhg == (pytest.approx(0.2), pytest.approx(200 / 8, rel=GRID))
    assert found.statement.startswith("The trace alone does not say: volumes of 2 to 200 ml with compliances of 0.2 to 25 ml/mmHg all ")
    assert "explain a v wave of 8 to 12 mmHg" in found.statement


def test_a_known_volume_gives_the_compliance_as_its_quotient() -> None:
    found = explain(Interval(9.9, 10.1), volume_ml=Interval(30, 50))
    assert found.volume_range_ml == (pytest.approx(30, rel=GRID), pytest.approx(50, rel=GRID))
    assert found.compliance_range_ml_per_mmhg == (pytest.approx(3.0, rel=GRID), pytest.approx(5.0, rel=GRID))
    assert found.best == (pytest.approx(40, rel=0.02), pytest.approx(4.0, rel=0.02))  # a grid point: 1.2 and 1.6 % apart
    assert found.is_bounded


def test_a_known_compliance_gives_the_volume_as_the_product() -> None:
    """Product of two normal readings, first order: relative deviations add in squares."""
    found = explain(Interval(9, 11), compliance_ml_per_mmhg=Interval(3.6, 4.4))
    relative = np.hypot(1 / 10, 0.4 / 4)  # both 10 % at 95 %
    low, high = found.volume_range_ml
    assert 0.5 * (high - low) / 40 == pytest.approx(relative, rel=0.02)  # first order in 10 %: 1 % and the grid
    assert np.sqrt(low * high) == pytest.approx(40, rel=0.015)


def test_compliance_from_the_ratio_is_exact_by_fieller() -> None:
    """With the volume known, C = V/h: the profile over C is Fieller's ``(V - C h)²/(s_V² + C² s_h²)``."""
    height, volume = Interval.of(10, 1.0), Interval.of(40, 6.0)
    low, high = explain(height, volume_ml=volume).compliance_range_ml_per_mmhg
    z = cutoff(0.95)
    a, b, c = 10**2 - z * 1.0, 10 * 40.0, 40**2 - z * 36.0
    root = np.sqrt(b**2 - a * c)
    assert low == pytest.approx((b - root) / a, rel=GRID)
    assert high == pytest.approx((b + root) / a, rel=GRID)


def test_stiffening_goes_both_ways() -> None:
    height = float(wave_height(40, 4.0, stiffening_per_ml=0.02))
    found = explain(Interval(height * 0.999, height * 1.001), volume_ml=Interval(39.9, 40.1), stiffening_per_ml=0.02)
    low, high = found.compliance_range_ml_per_mmhg
    assert np.sqrt(low * high) == pytest.approx(4.0, rel=GRID)
    assert "at the foot" in explain(Interval(9, 11), stiffening_per_ml=0.02).statement


def test_doubling_volume_and_compliance_leaves_the_height() -> None:
    one = explain(Interval(9, 11), volume_ml=Interval(30, 50))
    two = explain(
        Interval(9, 11), volume_ml=Interval(60, 100), volumes_ml=(4.0, 400.0), compliances_ml_per_mmhg=(0.4, 200.0),
    )
    np.testing.assert_allclose(two.deviance, one.deviance, rtol=1e-6, atol=1e-6)
    np.testing.assert_allclose(two.volume_range_ml, np.array(one.volume_range_ml) * 2, rtol=1e-6)
    np.testing.assert_allclose(two.compliance_range_ml_per_mmhg, np.array(one.compliance_range_ml_per_mmhg) * 2, rtol=1e-6)


def test_a_taller_wave_of_the_same_volume_means_a_stiffer_chamber() -> None:
    short, tall = (explain(Interval(h * 0.9, h * 1.1), volume_ml=Interval(35, 45)).compliance_range_ml_per_mmhg for h in (4, 25))
    assert tall[1] < short[0]


# ------------------------------------------------------------------ backward: other evidence


def test_echo_volumes_count_by_their_difference_and_by_the_wave() -> None:
    echo = (Interval.of(40, 3), Interval.of(80, 4))
    rising = explain(Interval(9, 11), echo_ml=echo)
    same = explain(Interval(9, 11), volume_ml=Interval.of(40, 5))
    np.testing.assert_allclose(rising.deviance, same.deviance, atol=1e-9)
    falling = explain(Interval(9, 11), wave="a", echo_ml=echo[::-1])
    np.testing.assert_allclose(falling.deviance, same.deviance, atol=1e-9)


def test_a_regurgitant_volume_bounds_from_below_and_with_the_stroke_from_both_sides() -> None:
    regurgitant, stroke = Interval(39.9, 40.1), Interval(59.9, 60.1)
    below = explain(Interval(9, 11), regurgitant_ml=regurgitant)
    assert below.volume_range_ml[0] == pytest.approx(40, rel=0.01)
    assert below.volume_bounds == below.compliance_bounds == (True, False)
    assert "nothing known bounds either from above" in below.statement
    both = explain(Interval(9, 11), regurgitant_ml=regurgitant, stroke_volume_ml=stroke, filling_share=(0.2, 0.7))
    assert both.volume_range_ml == (pytest.approx(40 + 12, rel=0.01), pytest.approx(40 + 42, rel=0.01))
    assert both.is_bounded


def test_a_tight_valve_leaves_the_filling_share_of_the_stroke() -> None:
    tight = explain(Interval(4, 5), regurgitant_ml=Interval(0, 0), stroke_volume_ml=Interval(69.9, 70.1), filling_share=(0.3, 0.6))
    assert tight.volume_range_ml == (pytest.approx(21, rel=0.01), pytest.approx(42, rel=0.01))


def test_a_bolus_into_the_circulation_only_bounds_the_chamber_from_above() -> None:
    bolus = Challenge(Interval(245, 255), Interval(24, 26))
    found = explain(Interval(9, 11), challenge=bolus)
    assert found.compliance_bounds == (False, True)
    assert found.volume_bounds == (False, True)  # what the compliance cannot exceed bounds the volume too
    # A bound with a soft edge: exactly at it the chance is one half, 0.147 (and -2 log 0.147 = 3.84) a standard deviation above.
    assert 10.0 < found.compliance_range_ml_per_mmhg[1] < 10.7
    soft = Challenge(Interval(245, 255), Interval(1.5, 3.0))  # the usual 100 ml/mmHg of a whole circulation: no news for an atrium
    assert explain(Interval(9, 11), challenge=soft).statement.startswith("Neither the trace nor 245 to 255 ml into the circulation")


def test_a_volume_into_the_chamber_itself_measures_it() -> None:
    found = explain(Interval(9.9, 10.1), challenge=Challenge(Interval(9.9, 10.1), Interval(2.4, 2.6), within="chamber"))
    assert found.is_bounded
    low, high = found.compliance_range_ml_per_mmhg
    assert low < 4.0 < high
    assert high / low < 1.2
    assert found.volume_range_ml[0] < 40 < found.volume_range_ml[1]


def test_more_knowledge_never_widens_the_region() -> None:
    known = {"volume_ml": Interval(30, 50)}, {"compliance_ml_per_mmhg": Interval(2, 6)}
    trace = explain(Interval(9, 11))
    one = explain(Interval(9, 11), **known[0])
    both = explain(Interval(9, 11), **known[0], **known[1])
    assert both.inside().sum() < one.inside().sum() < trace.inside().sum()
    assert len(both.known) == 2


def test_what_does_not_fit_together_is_said() -> None:
    found = explain(Interval(9, 11), volume_ml=Interval(30, 50), compliance_ml_per_mmhg=Interval(20, 30))
    assert not found.agrees
    assert found.statement.startswith("What is known does not fit together with a v wave of 9 to 11 mmHg")
    assert explain(Interval(9, 11), volume_ml=Interval(30, 50), compliance_ml_per_mmhg=Interval(3, 5)).agrees


def test_a_wide_answer_is_called_wide() -> None:
    assert "says little about either" in explain(Interval(9, 11), compliance_ml_per_mmhg=Interval(1, 9)).statement
    assert "says little" not in explain(Interval(9, 11), compliance_ml_per_mmhg=Interval(3, 5)).statement


def test_a_sharp_ridge_does_not_fall_between_the_points() -> None:
    found = explain(Interval(9.999, 10.001), volume_ml=Interval(39.99, 40.01), points=41)
    assert found.agrees
    assert found.misfit < 0.1
    # Both readings count with half a percent, the sharpest there is: together 0.7 %, and 1.4 % at 95 %.
    low, high = found.compliance_range_ml_per_mmhg
    assert (high - low) / 8 == pytest.approx(1.96 * 0.005 * np.sqrt(2), rel=0.05)


def test_the_range_covers_the_true_compliance_at_its_level() -> None:
    """Readings of a known pair (40 ml, 4 ml/mmHg) with normal errors: 95 % of the ranges hold the truth."""
    rng = np.random.default_rng(5)
    runs, held = 160, 0
    for _ in range(runs):
        height = Interval.of(10 + 0.8 * rng.standard_normal(), 0.8)
        volume = Interval.of(40 + 5 * rng.standard_normal(), 5)
        low, high = explain(height, volume_ml=volume, points=21).compliance_range_ml_per_mmhg
        held += low <= 4.0 <= high
    # Binomial: standard error of 0.95 in 160 runs is 0.017; three of them.
    assert held / runs == pytest.approx(0.95, abs=0.052)


# ------------------------------------------------------------------ effective compliance


def _steps(rng: np.random.Generator, planned: np.ndarray, compliance: float, volume_sd: float, pressure_sd: float) -> tuple:
    return (
        planned + volume_sd * rng.standard_normal(planned.shape),
        planned / compliance + pressure_sd * rng.standard_normal(planned.shape),
    )


@pytest.mark.parametrize(
    ("planned", "given", "volume_sd", "pressure_sd"),
    [
        ((50.0,) * 6, True, 4.0, 0.4),  # errors in both, one size
        ((25.0, 50.0, 100.0, -50.0, -100.0), True, 4.0, 0.4),  # sizes and signs differ
        ((25.0, 50.0, 100.0, -50.0, -100.0), False, 2.0, 0.4),  # the measured volumes stand for the plan
        ((50.0,) * 3, True, 4.0, 1.0),  # so few and so noisy that some intervals are open
    ],
)
def test_the_interval_of_the_compliance_covers_at_its_level(
    planned: tuple[float, ...], given: bool, volume_sd: float, pressure_sd: float
) -> None:
    rng = np.random.default_rng(9)
    plan, true, runs, held = np.array(planned), 20.0, 2000, 0
    for _ in range(runs):
        volume, pressure = _steps(rng, plan, true, volume_sd, pressure_sd)
        ratio = effective_compliance(volume, pressure, planned_ml=plan if given else None)
        held += ratio.low <= true <= ratio.high
    # Binomial: standard error of 0.95 in 2000 runs is 0.005; three of them.
    assert held / runs == pytest.approx(0.95, abs=0.015)


def test_known_errors_and_one_step() -> None:
    ratio = effective_compliance([100.0], [5.0], volume_sd_ml=2.0, pressure_sd_mmhg=0.3)
    assert ratio.value == pytest.approx(20.0)
    # To first order the relative error is the root of the sum of squares of 2 % and 6 %.
    assert 0.5 * (ratio.high - ratio.low) / 20 == pytest.approx(1.96 * np.hypot(0.02, 0.06), rel=0.03)
    rng = np.random.default_rng(2)
    held = 0
    for _ in range(3000):
        volume, pressure = _steps(rng, np.full(2, 60.0), 20.0, 3.0, 0.4)
        one = effective_compliance(volume, pressure, planned_ml=[60, 60], volume_sd_ml=3.0, pressure_sd_mmhg=0.4)
        held += one.low <= 20.0 <= one.high
    assert held / 3000 == pytest.approx(0.95, abs=0.012)  # binomial, three standard errors


def test_exact_steps_give_the_exact_ratio_whatever_their_signs_and_scale() -> None:
    volume = np.array([50.0, 100.0, -50.0])
    assert effective_compliance(volume, volume / 25).value == pytest.approx(25.0)
    scaled = effective_compliance(volume * 3, volume / 25 * 3)
    assert scaled.value == pytest.approx(25.0)
    noisy = effective_compliance([50, 52, 48], [2.2, 1.9, 2.0])
    turned = effective_compliance([-50, -52, -48], [-2.2, -1.9, -2.0])
    assert (noisy.low, noisy.high) == (pytest.approx(turned.low), pytest.approx(turned.high))


def test_pressure_that_did_not_move_leaves_the_compliance_open_above() -> None:
    ratio = effective_compliance([50, 50, 50], [0.5, -0.3, 0.4])
    assert not ratio.bounded
    assert ratio.high == np.inf
    assert 0 < ratio.low < ratio.value
    assert "cannot be told from none" in ratio.statement


# ------------------------------------------------------------------ errors


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Interval(3, 2), "interval from 3 to 2"),
        (lambda: Interval.of(3, -1), "sd = -1"),
        (lambda: wave_height(10, -2.0), r"compliance_ml_per_mmhg = -2.0: it must be above 0 ml/mmHg"),
        (lambda: wave_height(10, 2.0, stiffening_per_ml=3), "between 0 and 0.2 per ml"),
        (lambda: explain(Interval(9, 11), wave="c"), "wave = 'c'"),
        (lambda: explain(Interval(-3, -1)), "above 0 mmHg"),
        (lambda: explain(Interval(9, 11), wave="a", regurgitant_ml=Interval(10, 20)), "goes with wave 'v'"),
        (lambda: explain(Interval(9, 11), filling_share=(0.5, 2)), "filling_share"),
        (lambda: explain(Interval(9, 11), volumes_ml=(-1, 20)), "volumes_ml"),
        (lambda: explain(Interval(9, 11), points=5), "points = 5"),
        (lambda: Challenge(Interval(1, 2), Interval(1, 2), within="heart"), "within = 'heart'"),
        (lambda: effective_compliance([50], [2]), "1 step: two or more"),
        (lambda: effective_compliance([50, 50], [2]), "of one length"),
        (lambda: effective_compliance([50, 50], [2, 2], volume_sd_ml=1), "give both or none"),
        (lambda: height_of([3.0]), "heights of 1 beats"),
    ],
)
def test_a_bad_value_is_named_with_what_is_allowed(make, words: str) -> None:
    with pytest.raises(InputError, match=words):
        make()


# ------------------------------------------------------------------ the picture


def _words(drawn) -> str:
    from matplotlib.text import Text

    return " ".join(t.get_text().replace("\n", " ") for t in drawn.findobj(Text))


def test_the_figure_says_what_the_explanation_says_and_leaves_pyplot_alone() -> None:
    from caval.report.atrium_figure import atrium_figure

    had_pyplot = "matplotlib.pyplot" in sys.modules
    found = explain(Interval(9, 11), volume_ml=Interval(30, 50))
    drawn = atrium_figure(found, truth=(40, 4))
    words = _words(drawn)
    assert found.statement in words
    assert "30–50 ml" in words
    assert "truth" in words
    apart = explain(Interval(9, 11), volume_ml=Interval(9, 11), compliance_ml_per_mmhg=Interval(9, 11))
    assert "nothing fits" in _words(atrium_figure(apart))
    one_sided = explain(Interval(9, 11), regurgitant_ml=Interval(39.9, 40.1))
    assert "above 40 ml" in _words(atrium_figure(one_sided))
    assert "not a medical device" in words
    drawn.canvas.draw()
    assert ("matplotlib.pyplot" in sys.modules) == had_pyplot


@pytest.mark.parametrize(
    "found",
    [
        explain(Interval(9, 11)),
        explain(Interval(9, 11), wave="a", stroke_volume_ml=Interval(50, 70), filling_share=(0, 0.3)),
        explain(Interval(9, 11), volume_ml=Interval(30, 50), compliance_ml_per_mmhg=Interval(20, 30)),
        explain(Interval(20, 30), volume_ml=Interval(30, 50), stiffening_per_ml=0.02),
    ],
    ids=["trace alone", "a wave", "no fit", "stiffening"],
)
def test_any_explanation_can_be_drawn(found) -> None:
    from caval.report.atrium_figure import atrium_figure

    drawn = atrium_figure(found, title="A title")
    drawn.canvas.draw()
    assert found.statement in _words(drawn)
    assert "A title" in _words(drawn)
