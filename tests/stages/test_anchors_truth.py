"""Beats of simulated patients with known R, and ECGs spoilt in every way we know: sensitivity, precision, place, doubt and kind.

Sensitivity and precision count events within 0.1 s, less those within 0.4 s of an end, where a complex or its pulse is cut off.
"""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pandas as pd
import pytest

import caval
from caval.agree import match_events
from caval.model.ecg import ecg
from caval.model.events import Diathermy, spoil_ecg
from caval.model.scenario import load_scenario
from caval.model.simulate import Simulation, simulate
from caval.model.sketch import sketch
from caval.recording import Recording
from caval.stages._sequence import kinds

MINUTES = 2.0
BURSTS = (Diathermy(15, 8, 2.0), Diathermy(50, 12, 4.0), Diathermy(85, 10, 10.0))


@cache
def patient(scenario: str = "healthy", **settings: float) -> Simulation:
    return simulate(scenario, minutes=MINUTES, seed=7, settings={f"rhythm.{k}": v for k, v in settings.items()})


@cache
def ectopic(kind: str, share: float, coupling: float) -> Simulation:
    rhythm = ({"kind": kind, "premature_share": share, "coupling": coupling},)
    return simulate(replace(load_scenario("healthy"), rhythm=rhythm), minutes=MINUTES, seed=5)


def channel(of: Simulation, name: str) -> np.ndarray:
    return next(c for c in of.recording.channels if c.label.startswith(name)).physical()


def beats(of: Simulation, lead: np.ndarray | None, *, artery: bool = True) -> pd.DataFrame:
    """Beats of the patient with another ECG, or none."""
    arrays = {"CVP": (channel(of, "CVP"), 125.0, "mmHg")}
    if lead is not None:
        arrays["ECG II"] = (lead, 500.0, "mV")
    if artery:
        arrays["ABP"] = (channel(of, "ABP"), 125.0, "mmHg")
    return caval.Pipeline(stages=("anchors",)).run(Recording.from_arrays(arrays))["beats"]


def judged(of: Simulation, found: pd.DataFrame) -> tuple[float, float, np.ndarray, pd.DataFrame, np.ndarray]:
    """Sensitivity, precision, errors (s), the beats found and the truth's kinds, of matched pairs."""
    truth, times = of.truth.rhythm.r_times_s, found["r_time_s"].to_numpy(float)
    agreement = match_events(truth, times, window_s=0.1)

    def inside(rows: np.ndarray, at: np.ndarray) -> int:
        return sum(0.4 < at[i] < 60 * MINUTES - 0.4 for i in rows)

    hits = len(agreement.reference)
    sensitivity = hits / (hits + inside(agreement.missed, truth))
    precision = hits / (hits + inside(agreement.extra, times))
    error = times[agreement.found] - truth[agreement.reference]
    return sensitivity, precision, error, found.iloc[agreement.found], of.truth.rhythm.r_kind[agreement.reference]


def spread(values: np.ndarray) -> float:
    return float(np.subtract(*np.percentile(values, [75, 25])))


@pytest.mark.parametrize("heart_rate", [40, 75, 110, 150])
def test_clean_ecg_at_any_rate(heart_rate):
    of = patient(heart_rate=float(heart_rate))
    sensitivity, precision, error, rows, _ = judged(of, beats(of, channel(of, "ECG")))
    assert sensitivity == precision == 1.0
    assert spread(error) <= 0.004  # the aim: two samples at 500 Hz
    assert np.abs(error).max() <= 0.004
    assert set(rows["kind"]) == {"normal"}


def test_a_heart_at_175_a_minute():
    of = patient("tachycardia", heart_rate=175.0)
    sensitivity, precision, error, _, _ = judged(of, beats(of, channel(of, "ECG")))
    assert sensitivity == precision == 1.0
    assert spread(error) <= 0.004


def tall_t(of: Simulation) -> np.ndarray:
    """T as tall as R: a Gaussian of 45 ms, 0.27 s after R."""
    time = np.arange(round(MINUTES * 60 * 500)) / 500
    bumps = sum(np.exp(-0.5 * ((time - r - 0.27) / 0.045) ** 2) for r in of.truth.rhythm.r_times_s)
    return channel(of, "ECG") + 0.9 * bumps


def with_hum(of: Simulation) -> np.ndarray:
    time = np.arange(round(MINUTES * 60 * 500)) / 500
    return channel(of, "ECG") + 0.3 * np.sin(2 * np.pi * 50 * time) + np.sin(2 * np.pi * 0.3 * time)


def lead_off(of: Simulation) -> np.ndarray:
    lead = channel(of, "ECG").copy()
    lead[40 * 500 : 70 * 500] = 0.0
    return lead


def hum_alone(of: Simulation) -> np.ndarray:
    lead = lead_off(of)
    time = np.arange(30 * 500) / 500
    lead[40 * 500 : 70 * 500] = 0.3 * np.sin(2 * np.pi * 50 * time) + 0.02 * np.random.default_rng(1).standard_normal(len(time))
    return lead


def diathermy(of: Simulation) -> np.ndarray:
    return spoil_ecg(channel(of, "ECG"), 500.0, BURSTS, seed=2)


SPOILT = {
    "turned round": lambda of: -channel(of, "ECG"),
    "tall T": tall_t,
    "0.1 mV in noise of 0.015 mV": lambda of: ecg(of.truth.rhythm, MINUTES * 60, r_mv=0.1, noise_mv=0.015, seed=5),
    "0.1 mV in noise of 0.03 mV": lambda of: ecg(of.truth.rhythm, MINUTES * 60, r_mv=0.1, noise_mv=0.03, seed=5),
    "white noise of 0.15 mV": lambda of: ecg(of.truth.rhythm, MINUTES * 60, noise_mv=0.15, seed=6),
    "hum and wander": with_hum,
    "lead off": lead_off,
    "hum alone": hum_alone,
    "diathermy": diathermy,
}


@pytest.mark.parametrize("artery", [True, False], ids=["with artery", "without"])
@pytest.mark.parametrize("how", list(SPOILT))
def test_spoilt_ecgs(how, artery):
    of = patient(heart_rate=75.0)
    sensitivity, precision, error, _, _ = judged(of, beats(of, SPOILT[how](of), artery=artery))
    assert sensitivity >= 0.99
    assert precision >= 0.99
    assert spread(error) <= 0.004


@pytest.mark.parametrize("spike_mv", [0.6, 3.0, 10.0])
def test_paced_beats_are_wide_and_their_spikes_are_no_beats(spike_mv):
    of = patient("paced")
    lead = ecg(of.truth.rhythm, MINUTES * 60, spike_mv=spike_mv, seed=4)
    sensitivity, precision, error, rows, _ = judged(of, beats(of, lead))
    assert sensitivity == precision == 1.0
    assert spread(error) <= 0.004
    assert np.abs(error).max() <= 0.012  # a tenth of a wide QRS
    assert set(rows["kind"]) == {"normal"}  # the minute's QRS is the wide one


@pytest.mark.parametrize("how", ["clean", "diathermy", "no artery", "no ECG"])
def test_fibrillation(how):
    of = patient("fibrillation")
    lead = {"diathermy": diathermy(of), "no ECG": None}.get(how, channel(of, "ECG"))
    sensitivity, precision, _, rows, _ = judged(of, beats(of, lead, artery=how != "no artery"))
    assert sensitivity >= 0.99
    assert precision >= 0.99
    assert (rows["kind"] == "normal").mean() > 0.95  # where every interval is another, none is early


@pytest.mark.parametrize(("share", "coupling"), [(0.12, 0.58), (0.3, 0.5), (0.4, 0.65)])
def test_ventricular_premature_beats_are_found_placed_and_named(share, coupling):
    of = ectopic("ventricular_premature", share, coupling)
    sensitivity, precision, error, rows, truth = judged(of, beats(of, channel(of, "ECG")))
    assert sensitivity >= 0.99
    assert precision >= 0.99
    assert spread(error[truth == "premature"]) <= 0.004
    assert np.abs(np.median(error[truth == "premature"])) <= 0.004
    kind = rows["kind"].to_numpy()
    assert np.mean(kind[truth == "premature"] == "premature_wide") >= 0.95
    assert np.mean(kind[truth == "normal"] == "normal") >= 0.98


def test_atrial_premature_beats_are_premature_and_not_wide():
    of = ectopic("atrial_premature", 0.12, 0.58)
    sensitivity, precision, _, rows, truth = judged(of, beats(of, channel(of, "ECG")))
    assert sensitivity == precision == 1.0
    kind = rows["kind"].to_numpy()
    assert np.mean(kind[truth == "atrial_premature"] == "premature") >= 0.95
    assert np.mean(kind[truth == "normal"] == "normal") >= 0.98


def test_a_premature_beat_without_a_pulse_before_a_pause_is_a_beat():
    of = ectopic("ventricular_premature", 0.12, 0.5)
    abp = channel(of, "ABP").copy()
    early = of.truth.rhythm.r_times_s[of.truth.rhythm.r_kind == "premature"]
    for r in early:  # the pulse of each is taken out
        first, last = round((r + 0.12) * 125), min(round((r + 0.65) * 125), len(abp) - 1)
        abp[first:last] = np.linspace(abp[first], abp[last], last - first)
    arrays = {"ECG II": (channel(of, "ECG"), 500.0, "mV"), "CVP": (channel(of, "CVP"), 125.0, "mmHg"), "ABP": (abp, 125.0, "mmHg")}
    found = caval.Pipeline(stages=("anchors",)).run(Recording.from_arrays(arrays))["beats"]["r_time_s"].to_numpy(float)
    assert np.mean([np.abs(found - r).min() < 0.01 for r in early]) >= 0.95
    assert len(found) <= len(of.truth.rhythm.r_times_s) + 1


@pytest.mark.parametrize("scenario", ["healthy", "fibrillation", "premature_beats"])
def test_the_artery_alone(scenario):
    of = patient(scenario)
    sensitivity, precision, error, rows, _ = judged(of, beats(of, None))
    assert sensitivity >= 0.99
    assert precision >= 0.99
    assert set(rows["source"]) == {"abp"}
    assert np.abs(np.median(error)) < 0.05  # the transit to a radial artery is 0.15 to 0.25 s; 0.20 is taken


@pytest.mark.parametrize(
    ("scenario", "heart_rate"), [("healthy", 50.0), ("healthy", 75.0), ("healthy", 100.0), ("tamponade", None), ("junctional", None)]
)
def test_the_venous_trace_alone(scenario, heart_rate):
    of = patient(scenario, **({"heart_rate": heart_rate} if heart_rate else {}))
    sensitivity, precision, error, rows, _ = judged(of, beats(of, None, artery=False))
    assert sensitivity >= 0.97
    assert precision >= 0.97
    assert spread(error) < 0.03
    assert set(rows["source"]) == {"cvp"}
    assert np.abs(np.median(error)) < 2 * rows["r_sd_s"].median()


def test_the_venous_trace_stands_in_where_the_lead_is_off_and_there_is_no_artery():
    of = patient(heart_rate=75.0)
    _, _, error, rows, _ = judged(of, beats(of, lead_off(of), artery=False))
    away = rows["r_time_s"].between(41, 69).to_numpy()
    assert set(rows["source"][away]) == {"cvp"}
    assert np.abs(error[away]).max() < 0.05
    assert set(rows["source"][~away]) <= {"ecg", "cvp"}


def test_the_standard_deviation_of_r_is_that_of_its_errors():
    scaled: dict[str, list[np.ndarray]] = {"ecg": [], "abp": [], "cvp": []}
    of = patient(heart_rate=75.0)
    for how in ("0.1 mV in noise of 0.015 mV", "0.1 mV in noise of 0.03 mV", "white noise of 0.15 mV", "diathermy", "lead off"):
        for artery in (True, False):
            _, _, error, rows, _ = judged(of, beats(of, SPOILT[how](of), artery=artery))
            source = rows["source"].replace("fused", "ecg").to_numpy()
            for name, parts in scaled.items():
                parts.append((error / rows["r_sd_s"].to_numpy())[source == name])
    for name, parts in scaled.items():
        z = np.concatenate(parts)
        assert len(z) > 50
        robust = 1.4826 * np.median(np.abs(z - np.median(z)))
        assert 0.5 < robust < 2.0, name


def test_kinds_of_a_sequence():
    steady = np.arange(40) * 0.8
    none = np.zeros(40, dtype=bool)
    assert set(kinds(steady, none)) == {"normal"}
    assert set(kinds(steady, ~none)) == {"normal"}  # another shape, but on time
    early = steady.copy()
    early[20] -= 0.3
    assert list(np.flatnonzero(kinds(early, none) == "premature")) == [20]
    wide = none.copy()
    wide[20] = True
    assert list(np.flatnonzero(kinds(early, wide) == "premature_wide")) == [20]
    between = np.insert(steady, 20, steady[19] + 0.42)  # an interpolated beat: the next comes on time, and is normal
    kind = kinds(between, np.insert(none, 20, True))
    assert list(np.flatnonzero(kind != "normal")) == [20]
    every_second = steady.copy()
    every_second[1::2] -= 0.25
    assert list(np.flatnonzero(kinds(every_second, none) == "premature")) == list(range(1, 40, 2))
    assert list(kinds(steady[:3], none[:3])) == ["normal"] * 3


@pytest.mark.parametrize("channels", [("ECG", "ABP"), ("ECG",), ()], ids=["both", "ECG", "neither"])
def test_rows_are_the_same_whatever_the_block(channels):
    """With a lead off across a block's border, so that transit times and venous pictures learned elsewhere are needed there."""
    drawn = sketch(minutes=8, seed=6).recording
    arrays = {c.label: (c.physical(), c.sampling_rate, c.unit) for c in drawn.channels if c.label.split()[0] in ("CVP", *channels)}
    for label, (values, rate, unit) in arrays.items():
        if label.startswith("ECG"):
            off = values.copy()
            off[round(225 * rate) : round(262 * rate)] = 0.0
            off[round(100 * rate) : round(140 * rate)] = 0.0
            arrays[label] = (off, rate, unit)
    recording = Recording.from_arrays(arrays)
    whole = caval.Pipeline(stages=("anchors",)).run(recording)["beats"]
    assert len(whole) > 300
    for block_s in (60.0, 240.0):
        other = caval.Pipeline(stages=("anchors",), block_s=block_s).run(recording)["beats"]
        assert len(other) == len(whole)
        for column in ("r_time_s", "r_sd_s", "confidence"):
            assert np.allclose(other[column], whole[column], rtol=0, atol=1e-9), column
        for column in ("source", "kind"):
            assert list(other[column]) == list(whole[column])
