"""Truth: marks are extrema of the noise-free trace after the line, move with the line, and say what they are not."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from scipy import signal

from caval.model.line import Measured, measure
from caval.model.simulate import Simulation, simulate
from caval.model.truth import beat_truth, wave_truth

HZ = 500.0
SIGN = {"a": 1.0, "c": 1.0, "v": 1.0, "x": -1.0, "y": -1.0}


@pytest.fixture(scope="module")
def made() -> dict[str, Simulation]:
    return {name: simulate(name, minutes=0.7) for name in ("healthy", "fibrillation", "complete_block", "acute_regurgitation")}


def fine(made: Simulation, **changes: float) -> Measured:
    """The trace the marks are read from: after the line, without noise, at the model's rate."""
    line = made.scenario.with_settings({f"line.{k}": v for k, v in changes.items()}).measuring()
    return measure(made.truth.heart.pressures["ra"], HZ, line, made.scenario.happenings(), sampling_rate=HZ)


def marks_of(made: Simulation, trace: Measured, spans: pd.DataFrame | None = None) -> pd.DataFrame:
    return wave_truth(trace.clean_mmhg, HZ, trace.delay_s, made.truth.rhythm, made.truth.heart, spans=spans)


@pytest.mark.parametrize("name", ["healthy", "fibrillation", "complete_block", "acute_regurgitation"])
def test_marks_stand_on_extrema_of_the_trace_after_the_line(made: dict[str, Simulation], name: str) -> None:
    trace = fine(made[name]).clean_mmhg
    seen = made[name].truth.marks.dropna(subset="time_s")
    assert len(seen) > 60
    for mark, sign in SIGN.items():
        extrema = signal.find_peaks(sign * trace)[0] / HZ
        at = seen.loc[seen["mark"] == mark, "time_s"].to_numpy(float)
        if len(at):
            away = np.abs(at[:, None] - extrema[None, :]).min(axis=1)
            assert away.max() <= 1 / HZ  # refined between samples by less than one


def test_pressure_is_that_of_the_trace_there(made: dict[str, Simulation]) -> None:
    trace = fine(made["healthy"]).clean_mmhg
    seen = made["healthy"].truth.marks.dropna(subset="time_s")
    there = np.interp(seen["time_s"], np.arange(len(trace)) / HZ, trace)
    np.testing.assert_allclose(seen["pressure_mmhg"], there, atol=0.05)  # a sample of 2 ms beside the top of a wave


def test_the_recorded_trace_has_the_marks_too(made: dict[str, Simulation]) -> None:
    """At 125 Hz, without noise: the same pressures, within what the finer sampling shows between two of its samples."""
    clean = made["healthy"].truth.clean_mmhg
    seen = made["healthy"].truth.marks.dropna(subset="time_s")
    there = np.interp(seen["time_s"], np.arange(len(clean)) / 125.0, clean)
    np.testing.assert_allclose(seen["pressure_mmhg"], there, atol=0.3)


def test_prominence_is_the_smaller_drop_to_either_side(made: dict[str, Simulation]) -> None:
    """Definition of topographic prominence, by hand, over 0.6 s around the mark."""
    trace = fine(made["healthy"]).clean_mmhg
    seen = made["healthy"].truth.marks.dropna(subset="time_s")
    inner = seen[seen["time_s"].between(1.0, 39.0)].iloc[::7]
    for _, mark in inner.iterrows():
        values = SIGN[mark["mark"]] * trace
        top = round(mark["time_s"] * HZ)
        top += int(np.argmax(values[top - 2 : top + 3])) - 2
        drops = []
        for side in (values[top - 150 : top][::-1], values[top + 1 : top + 151]):
            higher = np.flatnonzero(side > values[top])
            reach = side[: higher[0]] if len(higher) else side
            drops.append(values[top] - reach.min())
        assert mark["prominence_mmhg"] == pytest.approx(min(drops), abs=1e-6)


@pytest.mark.parametrize("longer_s", [0.010, 0.0337, 0.100])
def test_a_longer_line_moves_every_mark_by_its_delay(made: dict[str, Simulation], longer_s: float) -> None:
    own = made["healthy"].scenario.measuring().delay_s
    short, long = (fine(made["healthy"], delay_s=own + d) for d in (0.0, longer_s))
    assert long.delay_s - short.delay_s == pytest.approx(longer_s)
    before, after = (
        marks_of(made["healthy"], t).dropna(subset="time_s").set_index(["beat", "mark"])["time_s"] for t in (short, long)
    )
    both = before.index.intersection(after.index)
    assert len(both) > 0.97 * len(before)  # at the ends a mark may leave the record
    moved = (after[both] - before[both]).to_numpy(float)
    np.testing.assert_allclose(moved, longer_s, atol=1 / HZ)


def test_marks_lag_the_vessel_by_about_the_delay(made: dict[str, Simulation]) -> None:
    """The delay is that of slow waves; a wave of some hertz through a column that rings arrives within 10 ms of it (own choice)."""
    truth = made["healthy"].truth
    v = truth.marks[(truth.marks["mark"] == "v") & truth.marks["time_s"].between(1, 39)]["time_s"].to_numpy(float)
    vessel = signal.find_peaks(truth.heart.pressures["ra"])[0] / HZ
    lag = v - vessel[np.abs(v[:, None] - truth.delay_s - vessel[None, :]).argmin(axis=1)]
    assert np.median(lag) == pytest.approx(truth.delay_s, abs=0.010)


def test_no_p_no_a(made: dict[str, Simulation]) -> None:
    assert not (made["fibrillation"].truth.marks["mark"] == "a").any()


def test_every_p_has_one_a_and_every_beat_one_of_the_others(made: dict[str, Simulation]) -> None:
    for one in made.values():
        truth = one.truth
        p, r = truth.rhythm.p_times_s, truth.rhythm.r_times_s
        count = truth.marks.groupby("mark").size()
        assert abs(int(count.get("a", 0)) - np.count_nonzero(p < r[-1])) <= 1
        for mark in "cxvy":
            assert abs(int(count[mark]) - len(r)) <= 1
            assert truth.marks.loc[truth.marks["mark"] == mark, "beat"].is_unique


def test_a_cannon_says_so_and_only_a_cannon(made: dict[str, Simulation]) -> None:
    truth = made["complete_block"].truth
    a = truth.marks[truth.marks["mark"] == "a"]
    assert set(a["detail"]) == {"", "cannon"}
    assert (truth.marks.loc[truth.marks["mark"] != "a", "detail"] == "").all()
    valve = truth.heart.openings["tricuspid"]
    seen = a.dropna(subset="time_s")
    p = truth.rhythm.p_times_s
    fired = p[np.searchsorted(p, seen["time_s"].to_numpy(float) - truth.delay_s - 0.04, side="right") - 1]
    opening = valve[np.round((fired + 0.11) * HZ).astype(int)]
    cannon = (seen["detail"] == "cannon").to_numpy()
    assert (opening[cannon] < 0.1).all()
    assert (opening[~cannon] >= 0.1).all()
    assert not (made["healthy"].truth.marks["detail"] == "cannon").any()


def test_what_has_no_extremum_is_fused_and_has_no_place(made: dict[str, Simulation]) -> None:
    marks = made["acute_regurgitation"].truth.marks
    fused = marks[marks["state"] == "fused"]
    assert len(fused) > 40
    assert fused[["time_s", "pressure_mmhg", "prominence_mmhg"]].isna().all(axis=None)
    clear = marks[marks["state"] == "clear"]
    assert clear[["time_s", "pressure_mmhg", "prominence_mmhg"]].notna().all(axis=None)
    assert set(marks["state"]) <= {"clear", "fused"}


def test_no_two_marks_share_a_peak(made: dict[str, Simulation]) -> None:
    for one in made.values():
        seen = one.truth.marks.dropna(subset="time_s")
        peaks = np.sort(seen.loc[seen["mark"].isin(["a", "c"]), "time_s"].to_numpy(float))
        assert (np.diff(peaks) > 0.01).all()


def test_inside_a_span_no_wave_has_a_place() -> None:
    made = simulate("theatre", minutes=1.8)
    spans = made.truth.spans[made.truth.spans["channel"] == "CVP"]
    assert set(spans["kind"]) >= {"flush", "zeroing"}
    trace = fine(made)
    free, marks = marks_of(made, trace), marks_of(made, trace, spans)
    assert len(free) == len(marks)
    bad = marks[marks["state"] == "unusable"]
    assert bad[["time_s", "pressure_mmhg", "prominence_mmhg"]].isna().all(axis=None)
    seen = marks.dropna(subset="time_s")["time_s"].to_numpy(float)
    for span in spans.itertuples():
        assert not ((seen > span.onset_s) & (seen < span.onset_s + span.duration_s)).any()
        beats = int(span.duration_s * 74 / 60)
        r = made.truth.rhythm.r_times_s
        inside = np.flatnonzero((r > span.onset_s) & (r < span.onset_s + span.duration_s - 0.5))
        assert len(inside) >= beats - 2
        assert (marks[marks["beat"].isin(inside) & marks["mark"].isin(["c", "x", "v"])]["state"] == "unusable").all()
    away = free.dropna(subset="time_s")
    away = away[[not any(s.onset_s - 2 < t < s.onset_s + s.duration_s + 2 for s in spans.itertuples()) for t in away["time_s"]]]
    kept = marks.dropna(subset="time_s")["time_s"].to_numpy(float)
    assert np.isin(away["time_s"].to_numpy(float), kept).all()  # nothing is lost elsewhere


def test_a_usable_span_takes_nothing(made: dict[str, Simulation]) -> None:
    rows = [(5.0, 10.0, "level_change", "CVP", ""), (20.0, 5.0, "drift", "CVP", "")]
    spans = pd.DataFrame(rows, columns=["onset_s", "duration_s", "kind", "channel", "detail"])
    trace = fine(made["healthy"])
    pd.testing.assert_frame_equal(marks_of(made["healthy"], trace, spans), marks_of(made["healthy"], trace))


def test_beats_add_up(made: dict[str, Simulation]) -> None:
    """Forward through the lungs, beat by beat, is the output; regurgitant volume only where the valve leaks."""
    for name, low, high in (("healthy", 0.0, 2.0), ("acute_regurgitation", 30.0, 60.0)):
        truth = made[name].truth
        beats = truth.beats.iloc[:-1]
        seconds = truth.rhythm.r_times_s[-1] - truth.rhythm.r_times_s[0]
        inside = (truth.heart.time_s >= truth.rhythm.r_times_s[0]) & (truth.heart.time_s < truth.rhythm.r_times_s[-1])
        flow = np.maximum(truth.heart.flows["pulmonary"][inside], 0).mean()
        assert beats["stroke_volume_ml"].sum() / seconds == pytest.approx(flow, rel=0.005)
        assert beats["regurgitant_ml"].between(low, high).all()
        assert (beats["ra_volume_max_ml"] > beats["ra_volume_min_ml"]).all()
    assert beat_truth(made["healthy"].truth.rhythm, made["healthy"].truth.heart).iloc[-1].isna()["stroke_volume_ml"]
    compliance = made["healthy"].truth.beats["ra_compliance_ml_per_mmhg"].iloc[:-1]
    np.testing.assert_allclose(compliance, 1 / made["healthy"].scenario.model().ra.e_rest, rtol=1e-6)
