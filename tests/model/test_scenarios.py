"""Each scenario's trace shows what the scenario says it shows; what it shows is from the facts of the project, section 2.

Where a threshold has no source it is our own choice, wide enough for another seed. Waves are medians over the record's beats of the
noise-free trace after the line.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cache

import numpy as np
import pandas as pd
import pytest

from caval.errors import InputError
from caval.model.scenario import Scenario, load_scenario, scenario_names
from caval.model.simulate import Simulation, simulate

MINUTES = {"hypovolaemia_bolus": 4.5, "peep_steps": 4.0, "theatre": 6.0, "complete_block": 1.5, "paced": 1.0, "premature_beats": 1.5}
HZ = 500.0


class Seen:
    """What can be read off a simulated record."""

    def __init__(self, made: Simulation) -> None:
        self.truth, self.marks, self.beats = made.truth, made.truth.marks, made.truth.beats
        self.heart, self.r = made.truth.heart, made.truth.rhythm.r_times_s

    def wave(self, mark: str, detail: str | None = None) -> pd.DataFrame:
        rows = self.marks[self.marks["mark"] == mark]
        return rows if detail is None else rows[rows["detail"] == detail]

    def level(self, mark: str, detail: str | None = None) -> float:
        """Median pressure, NaN when no beat has it."""
        return float(self.wave(mark, detail)["pressure_mmhg"].median())

    def share(self, mark: str) -> float:
        """Share of waves that stand on an extremum."""
        return float((self.wave(mark)["state"] == "clear").mean())

    @property
    def times(self) -> pd.DataFrame:
        """Times of the marks, a row a beat."""
        return self.marks.set_index(["beat", "mark"])["time_s"].unstack()  # noqa: PD010

    @property
    def mean(self) -> float:
        return self.mean_between(0.0, np.inf)

    def mean_between(self, start_s: float, stop_s: float, name: str = "ra") -> float:
        time = self.heart.time_s
        return float(self.heart.pressures[name][(time >= start_s) & (time < stop_s)].mean())

    def output(self, start_s: float, stop_s: float) -> float:
        time = self.heart.time_s
        return float(self.heart.flows["aortic"][(time >= start_s) & (time < stop_s)].mean() * 0.06)

    def emptying(self) -> tuple[float, float]:
        """Fall of the atrium's pressure in the 150 ms after the tricuspid valve opens: how far (mmHg), how steeply at most (mmHg/s)."""
        ra, valve = self.heart.pressures["ra"], self.heart.openings["tricuspid"]
        depth, slope = [], []
        for r in self.r[1:-2]:
            start = round((r + 0.2) * HZ)
            start += int(np.argmax(valve[start : start + 150] > 0.1))
            part = ra[start : start + 75]
            depth.append(part[0] - part.min())
            slope.append(-np.diff(part).min() * HZ)
        return float(np.median(depth)), float(np.median(slope))

    @property
    def x_depth(self) -> float:
        """From the mean down to x."""
        return self.mean - self.level("x")

    @property
    def pulse(self) -> tuple[float, float]:
        """Median systolic and diastolic arterial pressure."""
        edges = np.round(self.r * HZ).astype(int)
        arteries = self.heart.pressures["arteries"]
        return tuple(float(np.median(f.reduceat(arteries, edges)[1:-1])) for f in (np.maximum, np.minimum))  # type: ignore[return-value]


@cache
def seen(name: str) -> Seen:
    return Seen(simulate(name, minutes=MINUTES.get(name, 0.7)))


CHECKS: dict[str, Callable[[Seen], None]] = {}


def shows(check: Callable[[Seen], None]) -> Callable[[Seen], None]:
    """Enter a check under the name of its scenario."""
    CHECKS[check.__name__] = check
    return check


@shows
def healthy(s: Seen) -> None:
    assert 1 <= s.mean <= 5  # Miller 6e table 32-8, as the next two
    assert 2 <= s.level("a") <= 7
    assert 2 <= s.level("v") <= 7
    assert all(s.share(mark) > 0.95 for mark in "acxvy")
    assert s.level("a") > s.level("v")
    assert s.level("a") > s.level("c") > s.level("x")
    table = s.times.iloc[1:-1]
    assert (np.diff(table[["a", "c", "x", "v", "y"]].to_numpy(), axis=1) > 0).all()
    a_to_r = s.r[table.index] - (table["a"].to_numpy() - s.truth.delay_s)
    assert (a_to_r > 0).all()  # a before R
    c_after = table["c"].to_numpy() - s.truth.delay_s - s.r[table.index]
    assert 0.050 <= np.median(c_after) <= 0.100  # from memory
    assert (c_after > 0.04).all()  # never on the ring of the line after a
    systole = s.r[table.index] + 0.45
    assert (table["v"].to_numpy() < systole).all()
    assert 90 <= s.pulse[0] <= 140  # from memory, as the next two
    assert 60 <= s.pulse[1] <= 90
    assert 4 <= s.output(0, np.inf) <= 8


@shows
def hypovolaemia_bolus(s: Seen) -> None:
    before, after = (10, 58), (200, 270)
    assert s.mean_between(*before) < 2.5
    assert s.mean_between(*after) > s.mean_between(*before) + 2
    assert s.output(*after) > 1.2 * s.output(*before)
    assert s.mean_between(*after, "arteries") > s.mean_between(*before, "arteries") + 10
    assert s.heart.blood_ml[-1] - s.heart.blood_ml[0] == pytest.approx(750, rel=1e-3)


@shows
def right_ventricular_failure(s: Seen) -> None:
    usual = seen("healthy")
    assert s.mean > 7
    assert s.level("a") > s.mean + 4
    assert s.level("c") - s.level("x") < 0.5 * (usual.level("c") - usual.level("x"))
    assert s.x_depth < 0.8 * usual.x_depth
    assert s.mean / s.mean_between(0, np.inf, "la") > 0.86  # RAP/PCWP of right-ventricular infarction (from memory)


@shows
def acute_regurgitation(s: Seen) -> None:
    assert s.level("v") > s.mean + 5  # the sign of regurgitation, seen second-hand; so the next
    assert s.level("v") > 1.5 * s.mean
    assert s.share("x") < 0.1  # a c-v wave without x (Miller 6e table 32-9)
    assert s.emptying()[1] > 2 * seen("healthy").emptying()[1]  # steep y
    forward, back = s.beats["stroke_volume_ml"].median(), s.beats["regurgitant_ml"].median()
    assert 0.3 < back / (forward + back) < 0.6  # severe, and alive


@shows
def chronic_regurgitation(s: Seen) -> None:
    acute = seen("acute_regurgitation")
    assert s.beats["regurgitant_ml"].median() == pytest.approx(acute.beats["regurgitant_ml"].median(), rel=0.10)
    assert s.level("v") < 10
    assert s.level("v") - s.mean < 3
    assert acute.level("v") - acute.mean > 3 * (s.level("v") - s.mean)
    assert s.beats["ra_volume_max_ml"].median() > 3 * acute.beats["ra_volume_max_ml"].median()


@shows
def tricuspid_stenosis(s: Seen) -> None:
    usual = seen("healthy")
    assert s.level("a") > s.mean + 6
    assert s.level("a") > 1.5 * usual.level("a")
    assert s.emptying()[1] < 0.3 * usual.emptying()[1]
    ra, rv, open_ = s.heart.pressures["ra"], s.heart.pressures["rv"], s.heart.openings["tricuspid"] > 0.9
    assert (ra - rv)[open_].mean() > 4  # severe: a mean gradient of 5 mmHg and more (from memory); less while a ends


@shows
def constriction(s: Seen) -> None:
    usual = seen("healthy")
    assert s.mean > 8
    assert s.level("y") < s.level("x") - 1  # M or W shape, y the deeper
    depth, slope = s.emptying()
    assert slope > 1.5 * usual.emptying()[1]
    assert depth > 1.5 * usual.emptying()[0]
    assert s.level("v") > s.level("x") + 1  # two descents, and a wave between them


@shows
def tamponade(s: Seen) -> None:
    assert s.mean > 10
    assert s.mean_between(0, np.inf, "pericardium") > 7
    x = s.level("c") - s.level("x")
    assert x > 3  # kept
    assert s.share("y") < 0.5 or s.level("v") - s.level("y") < 0.5 * x  # attenuated or lost
    assert s.emptying()[1] < 0.7 * seen("healthy").emptying()[1]
    assert s.output(0, np.inf) < 0.8 * seen("healthy").output(0, np.inf)


@shows
def restrictive(s: Seen) -> None:
    usual = seen("healthy")
    assert s.mean > 7
    assert s.level("a") > s.mean + 4
    assert s.emptying()[1] > 1.5 * usual.emptying()[1]


@shows
def fibrillation(s: Seen) -> None:
    usual = seen("healthy")
    assert s.wave("a").empty
    assert len(s.truth.rhythm.p_times_s) == 0
    rr = np.diff(s.r)
    assert rr.std() / rr.mean() > 0.12
    assert s.share("c") > 0.9
    assert s.share("v") > 0.9
    assert s.level("c") > usual.level("c")  # prominent c, weakened x (Miller 6e table 32-9; from memory)
    assert s.x_depth < usual.x_depth


@shows
def complete_block(s: Seen) -> None:
    p, r = s.truth.rhythm.p_times_s, s.r
    assert np.median(np.diff(p)) == pytest.approx(60 / 82, rel=0.05)
    assert np.median(np.diff(r)) == pytest.approx(60 / 38, rel=0.05)
    cannon, plain = s.wave("a", "cannon"), s.wave("a", "")
    assert min(len(cannon), len(plain)) > 8
    assert cannon["pressure_mmhg"].max() > 1.4 * plain["pressure_mmhg"].median()  # the tall ones; those on x are lower
    assert cannon["pressure_mmhg"].max() > 1.4 * seen("healthy").level("a")
    gaps = np.diff(np.sort(s.wave("a").dropna(subset="time_s")["time_s"]))
    assert np.median(gaps) == pytest.approx(60 / 82, rel=0.1)  # at their own pace


@shows
def junctional(s: Seen) -> None:
    a = s.wave("a")
    assert (a["detail"] == "cannon").all()
    assert s.share("a") > 0.95
    assert s.level("a") > 1.4 * seen("healthy").level("a")
    place = a["time_s"].to_numpy(float) - s.r[a["beat"]]
    place = np.where(place < -0.5, place + np.median(np.diff(s.r)), place)  # of the R before, where P falls after it
    assert np.nanstd(place) < 0.02
    assert np.diff(s.r).std() / np.diff(s.r).mean() < 0.06


@shows
def paced(s: Seen) -> None:
    np.testing.assert_allclose(np.diff(s.r), 60 / 70, atol=1e-6)
    cannon = s.wave("a", "cannon")
    assert 0.1 < len(cannon) / len(s.wave("a")) < 0.7  # come and go
    assert cannon["pressure_mmhg"].max() > 1.4 * seen("healthy").level("a")


@shows
def tachycardia(s: Seen) -> None:
    assert np.median(np.diff(s.r)) == pytest.approx(60 / 145, rel=0.05)
    a, c = (s.wave(w).set_index("beat") for w in "ac")
    apart = (c["time_s"] - a["time_s"]).dropna()
    assert apart.median() < 0.10  # 0.17 s in the healthy adult at 70/min
    notch = np.fmin(a["prominence_mmhg"], c["prominence_mmhg"]).reindex(s.truth.beats["beat"]).fillna(0.0)  # none where they are one
    assert notch.median() < 0.3 * seen("healthy").wave("a")["prominence_mmhg"].median()
    p_next = s.truth.rhythm.p_times_s
    y = s.wave("y").dropna(subset="time_s")["time_s"].to_numpy(float)
    y = y[y < p_next[-1]]
    until = p_next[np.searchsorted(p_next, y - s.truth.delay_s - 0.1)] + 0.09 + s.truth.delay_s - y
    assert np.median(until) < 0.20  # y to the next a


@shows
def first_degree_block(s: Seen) -> None:
    usual = seen("healthy")

    def gaps(x: Seen) -> tuple[float, float]:
        times = x.times
        return float((times["c"] - times["a"]).median()), float((times["a"] - times["v"].shift(1)).median())

    (long_c, long_v), (usual_c, usual_v) = gaps(s), gaps(usual)
    assert long_c > usual_c + 0.1  # apart from c
    assert long_v < usual_v - 0.05  # nearer to the v before it
    assert s.wave("c")["prominence_mmhg"].median() > usual.wave("c")["prominence_mmhg"].median()


@shows
def premature_beats(s: Seen) -> None:
    kind = s.truth.rhythm.r_kind
    early = np.flatnonzero(kind == "premature")
    early = early[(early > 0) & (early < len(s.r) - 1)]
    rr = np.diff(s.r)
    assert len(early) >= 3
    assert (rr[early - 1] < 0.85 * np.median(rr)).all()
    assert (rr[early] > 1.15 * np.median(rr)).all()  # the pause
    assert len(s.wave("a", "cannon")) >= 2
    cannon = s.wave("a", "cannon")
    assert cannon.loc[cannon["beat"] > 1, "beat"].isin(early + 1).all()  # of the P that finds the ventricle in systole


@shows
def child(s: Seen) -> None:
    assert all(s.share(mark) > 0.9 for mark in "acxvy")
    assert np.median(np.diff(s.r)) == pytest.approx(60 / 104, rel=0.05)
    assert 2 <= s.mean <= 6
    assert 85 <= s.pulse[0] <= 110  # school age, from memory; so the next two
    assert 50 <= s.pulse[1] <= 75
    assert 3.0 <= s.output(0, np.inf) / 0.8 <= 5.0  # l/min/m², 0.8 m²
    assert s.level("a") > s.level("v") > s.level("y")


@shows
def peep_steps(s: Seen) -> None:
    means = np.array([s.mean_between(start + 25, start + 60) for start in (0, 60, 120, 180)])  # seven breaths, settled
    part = np.diff(means) / (5 * 0.735559)
    assert (part > 0.15).all()  # 0.15 to 0.49 of PEEP in four studies
    assert (part < 0.49).all()


@shows
def theatre(s: Seen) -> None:
    a = s.wave("a")
    assert not (a["time_s"] > 300.5).any()
    assert s.truth.rhythm.spans_of("fibrillation").tolist() == [[300.0, 360.0]]
    early = a[a["time_s"] < 298]
    assert len(early) > 300
    assert set(s.truth.spans["kind"]) >= {"flush", "zeroing", "noise"}
    assert s.mean_between(275, 298) > s.mean_between(100, 165) + 1  # the bolus
    assert s.output(275, 298) > s.output(100, 165)


# ------------------------------------------------------------------ all of them


def test_every_scenario_has_a_check() -> None:
    assert set(CHECKS) == set(scenario_names())


@pytest.mark.parametrize("name", scenario_names())
def test_the_trace_shows_what_the_scenario_says(name: str) -> None:
    CHECKS[name](seen(name))


@pytest.mark.parametrize("name", scenario_names())
def test_a_scenario_says_what_it_is_and_what_it_shows(name: str) -> None:
    scenario = load_scenario(name)
    assert scenario.name == name
    assert len(scenario.title) > 5
    assert len(scenario.shows) > 10
    assert scenario.minutes >= 3


@pytest.mark.parametrize("name", scenario_names())
def test_blood_and_pressures_are_sound(name: str) -> None:
    s = seen(name)
    given = sum(g.volume_ml for g in load_scenario(name).gifts())
    drift = s.heart.blood_ml[-1] - s.heart.blood_ml[0] - (given if MINUTES.get(name, 0) > 4 else 0)
    assert abs(drift) < 1e-3 * max(given, 1e-3)
    for pressure in s.heart.pressures.values():
        assert np.isfinite(pressure).all()
    assert 50 < s.mean_between(0, np.inf, "arteries") < 125


def test_only_a_shut_valve_makes_a_cannon() -> None:
    """Regular sinus rhythm has none; every block, junctional and paced scenario has."""
    with_cannon = {name for name in scenario_names() if (seen(name).marks["detail"] == "cannon").any()}
    assert with_cannon == {"complete_block", "junctional", "paced", "premature_beats"}


def test_a_seed_gives_the_same_bits_and_another_seed_does_not() -> None:
    one, two, other = (simulate("fibrillation", minutes=0.2, seed=seed) for seed in (3, 3, 4))
    for name, trace in one.truth.heart.pressures.items():
        assert trace.tobytes() == two.truth.heart.pressures[name].tobytes()
    for label in one.recording.labels:
        assert one.recording.channel(label).signal().values.tobytes() == two.recording.channel(label).signal().values.tobytes()
    pd.testing.assert_frame_equal(one.truth.marks, two.truth.marks)
    assert one.truth.heart.pressures["ra"].tobytes() != other.truth.heart.pressures["ra"].tobytes()


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"rhythm.heart_rate": 0}, "heart_rate = 0: it must be between 20 and 220/min"),
        ({"rhythm.kind": "flutter"}, "no rhythm 'flutter'"),
        ({"breathing.rate_per_min": 0}, "breathing.rate_per_min = 0: allowed are 2 to 80"),
        ({"breathing.depth": 3}, "breathing has no 'depth'"),
        ({"line.damping": -1}, "damping = -1"),
        ({"svc.c": -1.0}, "svc.c = -1.0: allowed are 0.01 to 500 ml/mmHg"),
        ({"rv.e_peak": 0.01}, "rv.e_peak = 0.01 mmHg/ml: it must not be below rv.e_rest"),
        ({"blood_volume_ml": 99999}, "blood_volume_ml = 99999: allowed are 300 to 12000 ml"),
        ({"minutes": 0}, "minutes = 0"),
        ({"colour": 1}, "no parameter 'colour'"),
    ],
)
def test_a_bad_setting_is_named_before_anything_runs(settings: dict, words: str) -> None:
    with pytest.raises(InputError) as caught:
        load_scenario("healthy").with_settings(settings)
    assert words in str(caught.value)


def test_a_scenario_that_is_none() -> None:
    with pytest.raises(InputError, match="no scenario 'sick'; there are: acute_regurgitation"):
        load_scenario("sick")
    with pytest.raises(InputError, match="event kind 'storm'"):
        Scenario("own", events=({"kind": "storm", "onset_s": 1.0, "duration_s": 1.0},)).check()
