"""Rhythm: atria and ventricles fire when that rhythm makes them, seeded, and bad values say what is allowed."""

from __future__ import annotations

import numpy as np
import pytest

from caval.errors import InputError
from caval.model.rhythm import KINDS, OUTSIDE, Rhythm, rhythm, schedule

CONDUCTED = ("sinus", "tachycardia", "first_degree_block", "atrial_premature")


def _pr(beats: Rhythm) -> np.ndarray:
    with_r = beats.p_conducted >= 0
    return beats.r_times_s[beats.p_conducted[with_r]] - beats.p_times_s[with_r]


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_is_sorted_inside_the_record_and_indexed_right(kind: str) -> None:
    beats = rhythm(kind, 120, seed=4)
    for times in (beats.p_times_s, beats.r_times_s):
        assert (np.diff(times) > 0).all()
        assert not len(times) or (times[0] >= 0 and times[-1] < 120)
    assert len(beats.p_kind) == len(beats.p_conducted) == len(beats.p_times_s)
    assert len(beats.r_kind) == len(beats.r_times_s)
    assert (beats.p_conducted < len(beats.r_times_s)).all()
    led = beats.p_conducted[beats.p_conducted >= 0]
    assert len(np.unique(led)) == len(led)
    assert beats.stretches[0].wfdb == KINDS[kind].wfdb
    assert (np.diff(beats.r_times_s) > 0.25).all()


@pytest.mark.parametrize("kind", KINDS)
def test_the_mean_rate_is_the_rate_asked_for(kind: str) -> None:
    beats = rhythm(kind, 1800, seed=2)
    rate = 60 / np.diff(beats.r_times_s).mean()
    # Fibrillation: standard error of the mean of 2850 intervals of CV 0.22 is 0.4 %; premature atrial beats raise the rate by design.
    tolerance = 0.10 if kind == "atrial_premature" else 0.015
    assert rate == pytest.approx(KINDS[kind].heart_rate, rel=tolerance)


@pytest.mark.parametrize("kind", KINDS)
def test_the_same_seed_gives_the_same_bits_and_another_does_not(kind: str) -> None:
    one, same, other = (rhythm(kind, 60, seed=s) for s in (5, 5, 6))
    np.testing.assert_array_equal(one.r_times_s, same.r_times_s)
    np.testing.assert_array_equal(one.p_times_s, same.p_times_s)
    assert len(one.r_times_s) != len(other.r_times_s) or (one.r_times_s != other.r_times_s).any()


@pytest.mark.parametrize("kind", KINDS)
def test_a_longer_record_begins_with_the_same_beats(kind: str) -> None:
    short, long = rhythm(kind, 60, seed=5), rhythm(kind, 300, seed=5)
    np.testing.assert_array_equal(long.r_times_s[: len(short.r_times_s)], short.r_times_s)
    np.testing.assert_array_equal(long.p_times_s[: len(short.p_times_s)], short.p_times_s)


@pytest.mark.parametrize("kind", CONDUCTED)
def test_every_p_of_a_conducted_rhythm_has_its_r_one_pr_later(kind: str) -> None:
    beats = rhythm(kind, 120)
    assert (beats.p_conducted != -1).all()
    np.testing.assert_allclose(_pr(beats), KINDS[kind].pr_s, atol=1e-9)


def test_a_p_whose_r_lies_after_the_end_says_so() -> None:
    beats = rhythm("sinus", 10, variability=0, respiratory=0)
    late = beats.p_times_s[np.argmax(beats.p_times_s > 5)] + 0.05  # between a P and its R
    assert beats.cut(0, float(late)).p_conducted[-1] == OUTSIDE


def test_variability_has_the_size_asked_for() -> None:
    rr = rhythm("sinus", 3600, variability=0.05, respiratory=0.0, seed=3).rr_s[1:]
    # Nine slow waves and 4200 beats: the sample deviation is within some percent of the law's.
    assert rr.std() / rr.mean() == pytest.approx(0.05, rel=0.08)
    assert rhythm("sinus", 60, variability=0.0, respiratory=0.0).rr_s[1:].std() < 1e-6


def test_the_heart_speeds_up_in_inspiration() -> None:
    beats = rhythm("sinus", 1200, variability=0.0, respiratory=0.1, breath_rate=12, inspiration_s=1.0)
    middle = 0.5 * (beats.r_times_s[1:] + beats.r_times_s[:-1]) - KINDS["sinus"].pr_s
    phase = ((middle - 1.0) / 5.0) % 1.0  # 12 breaths a minute; inspiration is the first half
    rr = beats.rr_s[1:]
    assert rr[phase < 0.5].mean() < 0.95 * rr[phase >= 0.5].mean()


def test_fibrillation_has_no_p_and_skewed_uncorrelated_intervals() -> None:
    beats = rhythm("fibrillation", 3600, heart_rate=100, irregularity=0.22, seed=1)
    rr = beats.rr_s[1:]
    assert len(beats.p_times_s) == 0
    assert rr.std() / rr.mean() == pytest.approx(0.22, rel=0.04)  # 6000 intervals: standard error about 1.2 %, three of them
    assert abs(np.corrcoef(rr[1:], rr[:-1])[0, 1]) < 4 / np.sqrt(len(rr))  # four standard errors of no correlation
    z = (rr - rr.mean()) / rr.std()
    assert 0.4 < (z**3).mean() < 1.5
    assert rr.min() > 0.45 * 0.6


def test_complete_block_marches_through() -> None:
    beats = rhythm("complete_block", 600, heart_rate=38, atrial_rate=80, seed=2)
    assert set(beats.r_kind) == {"escape"}
    assert (beats.p_conducted == -1).all()
    assert len(beats.p_times_s) == pytest.approx(800, abs=4)
    rr = 60 / 38
    before = beats.r_times_s[np.searchsorted(beats.r_times_s, beats.p_times_s[5:-5]) - 1]
    share = (beats.p_times_s[5:-5] - before) / rr
    count = np.histogram(share, bins=5, range=(0, 1))[0]
    assert count.min() > 0.5 * count.mean()  # P falls everywhere in the ventricular cycle


def test_paced_ventricles_are_a_clock_and_the_atria_are_not() -> None:
    beats = rhythm("paced", 300, heart_rate=72)
    np.testing.assert_allclose(np.diff(beats.r_times_s), 60 / 72, atol=1e-9)
    assert np.diff(beats.p_times_s).std() > 0.005
    assert (beats.p_conducted == -1).all()


@pytest.mark.parametrize("after_r", [-0.08, 0.0, 0.12])
def test_junctional_atria_follow_the_ventricles(after_r: float) -> None:
    beats = rhythm("junctional", 60, retrograde_s=after_r)
    assert set(beats.p_kind) == {"retrograde"}
    assert set(beats.r_kind) == {"junctional"}
    away = beats.p_times_s[1:-1, None] - beats.r_times_s[None, :]
    np.testing.assert_allclose(away[np.arange(len(away)), np.abs(away - after_r).argmin(axis=1)], after_r, atol=1e-9)


def test_a_ventricular_premature_beat_is_early_blocks_the_next_p_and_the_pause_compensates() -> None:
    beats = rhythm("ventricular_premature", 900, variability=0.0, respiratory=0.0, premature_share=0.15, coupling=0.6, seed=8)
    early = np.flatnonzero(beats.r_kind == "premature")
    early = early[(early > 0) & (early < len(beats.r_times_s) - 1)]
    usual = 60 / 70
    assert len(early) / len(beats.r_times_s) == pytest.approx(0.15, abs=0.035)  # binomial, 1050 beats: three standard errors
    r = beats.r_times_s
    np.testing.assert_allclose(r[early + 1] - r[early - 1], 2 * usual, rtol=1e-3)
    assert (r[early] - r[early - 1] < 0.7 * usual).all()
    blocked = beats.p_times_s[beats.p_conducted == -1]
    assert len(blocked) == np.count_nonzero(beats.r_kind == "premature")
    last = r[np.searchsorted(r, blocked[1:]) - 1]
    assert np.isin(last, r[early]).mean() > 0.95  # a blocked P comes after its premature beat


def test_an_atrial_premature_beat_resets_the_node() -> None:
    beats = rhythm("atrial_premature", 900, variability=0.0, respiratory=0.0, seed=8)
    early = np.flatnonzero(beats.p_kind == "premature")[:-1]
    span = beats.p_times_s[early + 1] - beats.p_times_s[early - 1]
    assert (span < 1.8 * 60 / 70).all()  # less than two intervals: the pause does not compensate
    assert (beats.r_kind[beats.p_conducted[early]] == "atrial_premature").all()


def test_a_schedule_changes_rhythm_at_its_time() -> None:
    beats = schedule(
        [{"onset_s": 0, "kind": "sinus"}, {"onset_s": 60, "kind": "fibrillation", "heart_rate": 120}, {"onset_s": 120, "kind": "paced"}],
        180, seed=3,
    )
    assert beats.name == "sinus, fibrillation, paced"
    assert [s.wfdb for s in beats.stretches] == ["(N", "(AFIB", "(P"]
    assert not ((beats.p_times_s >= 60) & (beats.p_times_s < 120)).any()
    assert (np.diff(beats.r_times_s) > 0.25).all()
    assert np.diff(beats.r_times_s).max() < 2.0
    middle = beats.r_kind[(beats.r_times_s > 61) & (beats.r_times_s < 120)]
    assert set(middle) == {"fibrillation"}
    assert list(beats.kind_at([0, 59.9, 60, 130])) == ["sinus", "sinus", "fibrillation", "paced"]
    np.testing.assert_array_equal(beats.spans_of("fibrillation"), [[60.0, 120.0]])


def test_a_change_of_rhythm_leaves_what_was_before_as_it_was() -> None:
    alone = rhythm("sinus", 60, seed=3)
    changed = schedule([{"onset_s": 0, "kind": "sinus"}, {"onset_s": 60, "kind": "fibrillation"}], 120, seed=3)
    np.testing.assert_array_equal(changed.r_times_s[: len(alone.r_times_s)], alone.r_times_s)


def test_into_sinus_rhythm_no_r_comes_without_its_p() -> None:
    for seed in range(12):
        beats = schedule([{"onset_s": 0, "kind": "fibrillation"}, {"onset_s": 20, "kind": "sinus"}], 40, seed=seed)
        normal = np.flatnonzero(beats.r_kind == "normal")
        assert np.isin(normal, beats.p_conducted).all()


def test_cut_takes_the_run_in_off() -> None:
    whole = schedule([{"onset_s": 0, "kind": "sinus"}, {"onset_s": 50, "kind": "complete_block"}], 100, seed=3)
    part = whole.cut(20)
    np.testing.assert_allclose(part.r_times_s, whole.r_times_s[whole.r_times_s >= 20] - 20)
    assert [(s.onset_s, s.kind) for s in part.stretches] == [(0.0, "sinus"), (30.0, "complete_block")]
    np.testing.assert_allclose(_pr(part), KINDS["sinus"].pr_s, atol=1e-9)
    assert [s.kind for s in whole.cut(60).stretches] == ["complete_block"]
    with pytest.raises(InputError, match="inside 0 to 100 s"):
        whole.cut(50, 200)


@pytest.mark.parametrize(
    ("kind", "options", "words"),
    [
        ("sinus", {"heart_rate": 0}, "heart_rate = 0: it must be between 20 and 220/min"),
        ("sinus", {"heart_rate": float("nan")}, "heart_rate = nan"),
        ("tachycardia", {"heart_rate": 200}, "between 100 and 180/min"),
        ("sinus", {"pr_s": 0.0}, "pr_s = 0.0: it must be between 0.06 and 0.5 s"),
        ("tachycardia", {"pr_s": 0.4}, "at 140/min it must be between 0.06 and 0.321 s"),
        ("fibrillation", {"irregularity": 0.9}, "irregularity = 0.9"),
        ("complete_block", {"atrial_rate": -1}, "atrial_rate = -1"),
        ("flutter", {}, "no rhythm 'flutter'; rhythms are: sinus"),
    ],
)
def test_a_bad_value_is_named_with_its_range(kind: str, options: dict, words: str) -> None:
    with pytest.raises(InputError, match=words.replace("(", r"\(")):
        rhythm(kind, 60, **options)


def test_a_bad_schedule_says_what_is_wrong() -> None:
    with pytest.raises(InputError, match="duration_s = 0"):
        rhythm("sinus", 0)
    with pytest.raises(InputError, match="unknown option 'hart_rate'"):
        schedule([{"kind": "sinus", "hart_rate": 60}], 60)
    with pytest.raises(InputError, match="must rise"):
        schedule([{"onset_s": 0, "kind": "sinus"}, {"onset_s": 0, "kind": "paced"}], 60)
