"""Waves against the truth of simulated patients: every rhythm, the single beat against the picture, confidence, and what must not matter.

The aims (98 % within 30 ms, median errors of 6 and 12 ms, 2 % in fibrillation, 95 % of lone a waves) are the project's own: no published
standard sets tolerances for a, c, x, v and y. `tests/benchmarks/bench_truth.py` has the full table.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pandas as pd
import pytest

import caval
from caval.agree import match_events
from caval.model.simulate import Simulation, simulate
from caval.recording import Recording

WAVES = ("a", "c", "x", "v", "y")
SMALL = {"a": 0.006, "c": 0.006, "x": 0.006, "v": 0.012, "y": 0.012}


@cache
def made(name: str, seed: int = 5, **settings: float) -> Simulation:
    changes = {key.replace("__", "."): value for key, value in settings.items()}
    return simulate(name, minutes=1.5, seed=seed, settings={"line.noise_mmhg": 0.15, **changes})


@cache
def marked(name: str, seed: int = 5, **settings: float) -> caval.Result:
    return caval.mark(made(name, seed, **settings).recording)


def true_times(one: Simulation, wave: str, detail: str | None = None) -> np.ndarray:
    """Times of true extrema that stand three times above the noise in the waves' band (12 of 62.5 Hz)."""
    least = 3 * 0.15 * (12 / 62.5) ** 0.5
    rows = one.truth.marks[(one.truth.marks["mark"] == wave) & (one.truth.marks["prominence_mmhg"] >= least)]
    rows = rows if detail is None else rows[rows["detail"] == detail]
    return inner(rows["time_s"])


def inner(times: pd.Series) -> np.ndarray:
    found = np.sort(times.dropna().to_numpy(float))
    return found[(found > 1.5) & (found < 88.5)]  # the first and the last beat lack a neighbour


def found_times(result: caval.Result, wave: str) -> np.ndarray:
    marks = result.marks
    return inner(marks.loc[(marks["mark"] == wave) & (marks["state"] != "fused"), "time_s"])


@pytest.mark.parametrize(
    ("name", "settings"),
    [
        ("healthy", {"rhythm__heart_rate": 45.0}), ("healthy", {}), ("healthy", {"line__delay_s": 0.06}), ("first_degree_block", {}),
        ("premature_beats", {}), ("junctional", {}), ("fibrillation", {}), ("tachycardia", {"rhythm__heart_rate": 120.0}),
        ("tachycardia", {"rhythm__heart_rate": 140.0, "line__delay_s": 0.06}),
    ],
)
def test_waves_stand_where_they_are(name: str, settings: dict[str, float]) -> None:
    one, result = made(name, **settings), marked(name, **settings)
    for wave in WAVES:
        truth, found = true_times(one, wave), found_times(result, wave)
        if not len(truth):
            continue
        hit = match_events(truth, found, window_s=0.030)
        assert hit.sensitivity >= 0.97, wave  # the aim is 0.98; a minute and a half has some 100 beats, and two misses are 2 %
        every = inner(one.truth.marks.loc[one.truth.marks["mark"] == wave, "time_s"])
        assert match_events(every, found, window_s=0.030).precision >= 0.97, wave
        assert np.median(np.abs(found[hit.found] - truth[hit.reference])) <= SMALL[wave], wave


def test_fibrillation_has_no_a() -> None:
    for seed in (5, 6):
        assert (marked("fibrillation", seed).beats["a_state"].isin(["clear", "weak", "fused"])).mean() <= 0.02


@pytest.mark.parametrize("name", ["complete_block", "paced"])
def test_a_goes_with_its_p_wherever_that_falls(name: str) -> None:
    one, result = made(name), marked(name)
    found = found_times(result, "a")
    others = np.sort(np.concatenate([inner(one.truth.marks.loc[one.truth.marks["mark"] == w, "time_s"]) for w in "cv"]))
    for detail in ("", "cannon"):
        truth = true_times(one, "a", detail)
        truth = truth[np.abs(truth[:, None] - others[None, :]).min(axis=1) > 0.12]  # those that stand alone
        assert len(truth) > 10
        assert match_events(truth, found, window_s=0.030).sensitivity >= 0.95, detail


def test_cannon_waves_of_junctional_rhythm_are_a_and_not_c() -> None:
    result = marked("junctional")
    assert (result.marks["mark"] == "c").sum() == 0  # the atrium's peak is its own
    assert (result.beats["a_state"] == "clear").mean() > 0.95
    assert (result.beats["a_time_s"] > result.beats["r_time_s"]).mean() > 0.95  # in systole


def test_the_mark_follows_the_beat_and_not_the_picture() -> None:
    """Every wave of every beat is moved by itself, by 20 ms (SD); the error may grow by 3 ms."""
    one = made("healthy")
    rng = np.random.default_rng(3)
    truth = one.truth.marks[one.truth.marks["time_s"].notna()].sort_values("time_s")
    at = truth["time_s"].to_numpy(float)
    to = at + np.clip(0.020 * rng.standard_normal(len(at)), -0.045, 0.045)
    order = np.concatenate([[True], np.diff(to) > 0.03])  # waves keep their order
    at, to, wave = at[order], to[order], truth["mark"].to_numpy()[order]
    clean = one.truth.clean_mmhg
    time = np.arange(len(clean)) / 125.0
    noise = 0.05 * rng.standard_normal(len(clean))
    errors = {}
    for name, places, trace in (("still", at, clean), ("moved", to, np.interp(np.interp(time, to, at), time, clean))):
        ecg, _, abp = one.recording.channels
        arrays = {"ECG II": (ecg.physical(), 500, "mV"), "CVP": (trace + noise, 125, "mmHg"), "ABP": (abp.physical(), 125, "mmHg")}
        marks = caval.mark(Recording.from_arrays(arrays)).marks
        for kind in WAVES:
            expected = places[wave == kind]
            found = np.sort(marks.loc[marks["mark"] == kind, "time_s"].to_numpy(float))
            hit = match_events(expected, found, window_s=0.05)
            assert hit.sensitivity > 0.93, (name, kind)
            errors[name, kind] = float(np.median(np.abs(found[hit.found] - expected[hit.reference])))
    for kind in WAVES:
        assert errors["moved", kind] - errors["still", kind] <= 0.003, kind


def test_marks_that_are_sure_are_right() -> None:
    """Of the marks that say 0.9 nine in ten are right within 25 ms, on patients that the model of confidence was not fitted to."""
    said, right = [], []
    for name in ("healthy", "premature_beats", "complete_block", "paced", "tachycardia", "tamponade", "tricuspid_stenosis"):
        one, marks = made(name), marked(name).marks
        for wave in WAVES:
            mine = marks[(marks["mark"] == wave) & (marks["state"] != "fused") & marks["time_s"].between(1.5, 88.5)]
            truth = np.concatenate([[-np.inf], np.sort(one.truth.marks.loc[one.truth.marks["mark"] == wave, "time_s"].dropna()), [np.inf]])
            time = mine["time_s"].to_numpy(float)
            after = np.searchsorted(truth, time)
            right.append(np.minimum(np.abs(truth[after] - time), np.abs(time - truth[after - 1])) <= 0.025)
            said.append(mine["confidence"].to_numpy(float))
    sure, true = np.concatenate(said), np.concatenate(right)
    assert len(sure) > 3000
    near_nine = (sure > 0.85) & (sure < 0.95)
    assert true[near_nine].mean() >= 0.80  # some hundred marks, and the model is only a model
    assert true[sure >= 0.95].mean() >= 0.95
    assert true[sure < 0.6].mean() < 0.75  # and the unsure are


def _changed(one: Simulation, *, ecg: float = 1.0, cvp: float = 1.0, order: tuple[str, ...] = ("ECG II", "CVP", "ABP")) -> Recording:
    by = {c.label: c for c in one.recording.channels}
    arrays = {
        "ECG II": (ecg * by["ECG II"].physical(), 500, "mV"), "CVP": (cvp * by["CVP"].physical(), 125, "mmHg"),
        "ABP": (by["ABP"].physical(), 125, "mmHg"),
    }
    return Recording.from_arrays({label: arrays[label] for label in order})


@pytest.mark.parametrize(
    ("what", "change"),
    [
        ("polarity of the lead", {"ecg": -1.0}), ("height of the lead", {"ecg": 0.3}), ("height of the waves", {"cvp": 1.6}),
        ("order of the channels", {"order": ("ABP", "CVP", "ECG II")}),
    ],
)
def test_what_must_not_matter_does_not(what: str, change: dict[str, object]) -> None:
    one = made("healthy")
    before = caval.mark(_changed(one)).marks
    after = caval.mark(_changed(one, **change)).marks  # type: ignore[arg-type]
    for wave in WAVES:
        old, new = (np.sort(m.loc[m["mark"] == wave, "time_s"].to_numpy(float)) for m in (before, after))
        hit = match_events(old, new, window_s=0.02)
        assert min(hit.sensitivity, hit.precision) >= 0.98, (what, wave)
        assert np.median(np.abs(new[hit.found] - old[hit.reference])) <= 0.004, (what, wave)  # half a sample; noise grows with the waves


def test_a_stretch_in_which_the_line_is_handled_carries_no_marks_and_says_why() -> None:
    one = made("healthy")
    cvp = one.recording.channel("CVP").physical().copy()
    time = np.arange(len(cvp)) / 125.0
    handled = (time > 40) & (time < 43)
    cvp[handled] += 3.0 * np.sin(2 * np.pi * 9.0 * time[handled])
    ecg, _, abp = one.recording.channels
    arrays = {"ECG II": (ecg.physical(), 500, "mV"), "CVP": (cvp, 125, "mmHg"), "ABP": (abp.physical(), 125, "mmHg")}
    result = caval.mark(Recording.from_arrays(arrays))
    assert not result.marks["time_s"].between(40.3, 42.7).any()
    lost = result.beats[result.beats["r_time_s"].between(40.4, 42.4)]
    assert set(lost["reason"]) == {"noise"}
    assert result.marks["time_s"].between(36, 39).any()
    assert result.marks["time_s"].between(44.5, 48).any()
