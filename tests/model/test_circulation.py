"""The circulation: what it conserves, how exact it is, and the healthy adult against published normal values.

Normal values: Miller, *Anesthesia*, 6th ed., table 32-8 (RA a 6 (2-7), v 5 (2-7), mean 3 (1-5); RV 25/6; PA 25/9, mean 15; LA a 10, v 12,
mean 8). They are read at rest, so the heart below beats evenly and does not breathe (end-expiration).
"""

from __future__ import annotations

from dataclasses import dataclass, fields, is_dataclass, replace

import numpy as np
import pytest

from caval.errors import InputError
from caval.model.circulation import Breathing, Haemodynamics, Infusion, run
from caval.model.parameters import PRESETS, Circulation, names, preset, source

STILL = Breathing(mode="none")
PR_S = 0.16
RATE_PER_MIN = 68.0
HZ = 500.0


def regular(
    circulation: Circulation | None = None, *, beats: int = 6, rate_per_min: float = RATE_PER_MIN, pr_s: float | None = PR_S,
    breathing: Breathing = STILL, **options: object,
) -> Haemodynamics:
    """Evenly beating heart with R at 0.3 s and every interval from there; `pr_s` None leaves the atria still."""
    interval = 60.0 / rate_per_min
    r = 0.3 + np.arange(-int(20 / interval), beats) * interval
    p = r[:0] if pr_s is None else r - pr_s
    return run(circulation or Circulation(), p, r, beats * interval, breathing=breathing, rate=HZ, **options)  # type: ignore[arg-type]


@dataclass(frozen=True)
class Beat:
    """One steady beat: waves (mmHg) and their times after R (s), on the clock of the vessel."""

    heart: Haemodynamics
    r_s: float
    interval_s: float

    def part(self, name: str, start_s: float, stop_s: float) -> np.ndarray:
        start, stop = (round((self.r_s + t) * HZ) for t in (start_s, stop_s))
        table = {**self.heart.pressures, **self.heart.flows, **{f"{k}_ml": v for k, v in self.heart.volumes.items()}}
        return table[name][start:stop]

    def whole(self, name: str) -> np.ndarray:
        return self.part(name, 0.0, self.interval_s)

    def extreme(self, name: str, start_s: float, stop_s: float, sign: float = 1.0) -> tuple[float, float]:
        """Value and time after R of the highest (sign 1) or lowest (-1) local extremum; NaN where there is none."""
        values = sign * self.part(name, start_s, stop_s)
        inner = np.flatnonzero((values[1:-1] >= values[:-2]) & (values[1:-1] > values[2:])) + 1
        if not len(inner):
            return np.nan, np.nan
        top = inner[np.argmax(values[inner])]
        return sign * float(values[top]), start_s + top / HZ

    @property
    def a(self) -> tuple[float, float]:
        return self.extreme("ra", -PR_S + 0.04, 0.03)

    @property
    def c(self) -> tuple[float, float]:
        return self.extreme("ra", 0.03, 0.16)

    @property
    def x(self) -> tuple[float, float]:
        return self.extreme("ra", 0.14, 0.36, -1.0)

    @property
    def v(self) -> tuple[float, float]:
        return self.extreme("ra", 0.28, 0.50)

    @property
    def y(self) -> tuple[float, float]:
        return self.extreme("ra", 0.40, 0.65, -1.0)

    @property
    def opening_s(self) -> float:
        """When the tricuspid valve opens, after R."""
        flow = self.part("tricuspid", 0.2, 0.6)
        return 0.2 + float(np.argmax(flow > 5.0)) / HZ


@pytest.fixture(scope="module")
def healthy() -> Beat:
    interval = 60.0 / RATE_PER_MIN
    return Beat(regular(), 0.3 + 3 * interval, interval)


# ------------------------------------------------------------------ the integrator


def test_blood_is_conserved_over_ten_minutes() -> None:
    heart = regular(beats=680, breathing=Breathing())
    assert heart.time_s[-1] > 599
    assert np.ptp(heart.blood_ml) / heart.blood_ml[0] < 1e-6  # asked for; rounding of 1.2 million steps gives about 1e-12
    assert heart.blood_ml[0] == pytest.approx(Circulation().blood_volume_ml, rel=1e-9)


def test_an_infusion_adds_what_it_gives() -> None:
    heart = regular(beats=20, infusions=[Infusion(2.0, 5.0, 300.0)])
    assert heart.blood_ml[-1] - heart.blood_ml[0] == pytest.approx(300.0, rel=1e-3)  # onset and end fall on steps of 0.5 ms


def test_halving_the_step_halves_the_error() -> None:
    coarse, middle, fine = (regular(beats=3, step_s=step).pressures["ra"] for step in (0.0005, 0.00025, 0.000125))
    first, second = np.abs(coarse - middle).max(), np.abs(middle - fine).max()
    # The scheme is of first order: what one halving moves is about the error that is left. 0.1 mmHg, a tenth of what a monitor shows.
    assert first < 0.1
    assert second < 0.7 * first  # one half, and room for the instants at which valves begin to open


def test_the_same_input_gives_the_same_bits() -> None:
    one, two = regular(beats=3), regular(beats=3)
    for name, trace in one.pressures.items():
        assert trace.tobytes() == two.pressures[name].tobytes()


def test_the_result_does_not_depend_on_its_sampling() -> None:
    fine, coarse = regular(beats=3), run(
        Circulation(), 0.3 - PR_S + np.arange(-22, 3) * 60 / RATE_PER_MIN, 0.3 + np.arange(-22, 3) * 60 / RATE_PER_MIN,
        3 * 60 / RATE_PER_MIN, breathing=STILL, rate=250.0,
    )
    n = min(len(coarse.time_s), len(fine.time_s[::2]))
    np.testing.assert_allclose(fine.pressures["ra"][::2][:n], coarse.pressures["ra"][:n], atol=1e-9)  # rounding of the beats' times


@pytest.mark.parametrize("area_cm2", [0.2, 0.4, 0.8])
def test_a_leak_obeys_the_orifice_formula(area_cm2: float) -> None:
    """At 20 mmHg 0.2, 0.4 and 0.8 cm² pass 45, 90 and 179 ml/s: A·√(2Δp/ρ), ρ = 1.06 g/ml (closed form)."""
    interval = 60.0 / RATE_PER_MIN
    beat = Beat(regular(Circulation().with_values({"tricuspid.a_min_cm2": area_cm2})), 0.3 + 3 * interval, interval)
    shut = slice(round(0.12 * HZ), round(0.30 * HZ))
    back = -beat.whole("tricuspid")[shut]
    across = (beat.whole("rv") - beat.whole("ra"))[shut]
    at_20 = back * np.sqrt(20.0 / across)
    expected = area_cm2 * np.sqrt(2 * 20.0 * 1333.22 / 1.06)
    assert expected == pytest.approx({0.2: 45, 0.4: 90, 0.8: 179}[area_cm2], abs=0.6)
    np.testing.assert_allclose(np.median(at_20), expected, rtol=0.03)  # inertia of the jet while the pressure moves


# ------------------------------------------------------------------ the healthy adult


def test_right_atrium_inside_the_normal_ranges(healthy: Beat) -> None:
    """Miller 6e table 32-8."""
    assert 2 <= healthy.a[0] <= 7
    assert 2 <= healthy.v[0] <= 7
    assert 1 <= healthy.whole("ra").mean() <= 5


def test_right_atrium_near_its_typical_values(healthy: Beat) -> None:
    """Miller 6e table 32-8; a quarter of the published range (1.25 mmHg for a and v, 1 for the mean) is our own choice."""
    assert healthy.a[0] == pytest.approx(6, abs=1.25)
    assert healthy.v[0] == pytest.approx(5, abs=1.25)
    assert healthy.whole("ra").mean() == pytest.approx(3, abs=1)


def test_right_ventricle_and_lungs_near_typical_values(healthy: Beat) -> None:
    """Miller 6e table 32-8; 3 mmHg of systolic, 2 of diastolic and mean pressures: no less than the readings' own spread."""
    assert healthy.whole("rv").max() == pytest.approx(25, abs=3)
    assert healthy.part("rv", 0.0, 0.02).mean() == pytest.approx(6, abs=2)  # end-diastolic
    lungs = healthy.whole("pulmonary_arteries")
    assert (lungs.max(), lungs.min(), lungs.mean()) == (pytest.approx(25, abs=3), pytest.approx(9, abs=2), pytest.approx(15, abs=2))


def test_left_atrium_near_typical_values(healthy: Beat) -> None:
    """Miller 6e table 32-8; 2 mmHg, as above."""
    assert healthy.part("la", -0.12, 0.03).max() == pytest.approx(10, abs=2)
    assert healthy.part("la", 0.25, 0.50).max() == pytest.approx(12, abs=2)
    assert healthy.whole("la").mean() == pytest.approx(8, abs=2)


def test_systemic_pressure_output_and_volumes(healthy: Beat) -> None:
    """90-140/60-90 mmHg, 4-8 l/min (from memory); end-diastolic 100-200, ejected fraction 45-70 % of both ventricles (from memory)."""
    arteries = healthy.whole("arteries")
    assert 90 <= arteries.max() <= 140
    assert 60 <= arteries.min() <= 90
    assert 4 <= healthy.whole("aortic").mean() * 0.06 <= 8
    for ventricle in ("rv_ml", "lv_ml"):
        volume = healthy.whole(ventricle)
        assert 100 <= volume.max() <= 200
        assert 0.45 <= np.ptp(volume) / volume.max() <= 0.70
    assert healthy.whole("tricuspid").min() > -60  # closing takes some ml, no more: the valve does not leak
    assert np.maximum(-healthy.whole("tricuspid"), 0).sum() / HZ < 2.0


def test_both_sides_pump_the_same(healthy: Beat) -> None:
    """A steady loop: flows of one beat agree. 1 %: the run-in of 20 s leaves so much."""
    right, left = healthy.whole("pulmonary").mean(), healthy.whole("aortic").mean()
    assert right == pytest.approx(left, rel=0.01)
    assert healthy.whole("tricuspid").mean() == pytest.approx(left, rel=0.01)


# ------------------------------------------------------------------ order and timing


def test_order_of_the_waves(healthy: Beat) -> None:
    """a, c, x, v, y (common practice)."""
    times = [wave[1] for wave in (healthy.a, healthy.c, healthy.x, healthy.v, healthy.y)]
    assert np.isfinite(times).all()
    assert (np.diff(times) > 0).all()


def test_heights_of_the_waves(healthy: Beat) -> None:
    """a is the tallest, the systolic part of x the deepest (from memory: x′ is usually the deeper)."""
    assert healthy.a[0] > healthy.v[0]
    assert healthy.a[0] > healthy.c[0]
    assert healthy.x[0] < healthy.y[0]


def test_a_follows_p(healthy: Beat) -> None:
    """80 to 100 ms from the onset of P at the heart (from memory: Mark, Atlas of Cardiovascular Monitoring, 1998)."""
    assert 0.080 <= healthy.a[1] + PR_S <= 0.100


def test_c_follows_r(healthy: Beat) -> None:
    """50 to 100 ms (from memory)."""
    assert 0.050 <= healthy.c[1] <= 0.100


def test_v_at_the_end_of_systole_and_y_after_the_valve_opens(healthy: Beat) -> None:
    """v near the end of systole, y early in diastole (common practice): v within 40 ms of the opening, y within 200 ms after it."""
    assert abs(healthy.v[1] - healthy.opening_s) < 0.04
    assert 0.0 < healthy.y[1] - healthy.opening_s < 0.20
    closing = float(np.argmax(healthy.part("aortic", 0.15, 0.6) < 0)) / HZ + 0.15  # the dicrotic notch
    assert -0.02 < healthy.v[1] - closing < 0.15
    assert healthy.y[1] > closing


def test_a_ends_before_the_arterial_upstroke(healthy: Beat) -> None:
    """Common practice. Ends: back at the foot it has before c."""
    upstroke = float(np.argmax(healthy.part("aortic", 0.0, 0.2) > 5.0)) / HZ
    foot, foot_s = healthy.extreme("ra", healthy.a[1], healthy.c[1], -1.0)
    assert healthy.a[1] < upstroke
    assert foot_s < upstroke + 0.03
    assert foot < 0.5 * (healthy.a[0] + healthy.x[0])


def test_without_atrial_activation_no_a() -> None:
    interval = 60.0 / RATE_PER_MIN
    still = Beat(regular(pr_s=None), 0.3 + 3 * interval, interval)
    assert np.isnan(still.a[0])
    diastole = still.part("ra", -PR_S, 0.0)
    assert (np.diff(diastole) > -0.002).all()  # the slow filling goes on; no hump, at most 1 mmHg/s of fall
    assert np.isfinite([still.c[0], still.x[0], still.v[0], still.y[0]]).all()


def test_the_bulge_makes_c_and_the_ring_makes_x(healthy: Beat) -> None:
    """Mechanics, not drawing: without the bulge no c in the same place, without the ring's descent no deep x."""
    interval = 60.0 / RATE_PER_MIN
    flat = Beat(regular(Circulation().with_values({"heart.leaflet_c": 0.0, "heart.annulus_share": 0.0})), 0.3 + 3 * interval, interval)
    bulging = Beat(regular(Circulation().with_values({"heart.annulus_share": 0.0})), 0.3 + 3 * interval, interval)
    assert flat.part("ra", 0.06, 0.12).mean() < bulging.part("ra", 0.06, 0.12).mean() - 0.5
    assert flat.part("ra", 0.14, 0.36).min() > healthy.x[0] + 1.0


# ------------------------------------------------------------------ cannon waves


def test_an_atrium_that_fires_on_a_shut_valve_makes_a_cannon_wave(healthy: Beat) -> None:
    """Cannon a: the atrium contracts on a closed valve (Miller 6e table 32-9); half as tall again as an ordinary a (own choice)."""
    interval = 1.0
    heart = regular(rate_per_min=60.0, pr_s=0.0)
    cannon = Beat(heart, 0.3 + 3 * interval, interval)
    height, at_s = cannon.extreme("ra", 0.03, 0.25)
    assert height > 1.5 * healthy.a[0]
    valve = heart.openings["tricuspid"]
    assert valve[round((cannon.r_s + at_s) * HZ)] < 0.1
    assert healthy.heart.openings["tricuspid"][round((healthy.r_s + healthy.a[1]) * HZ)] > 0.5  # the ordinary a: the valve is open


# ------------------------------------------------------------------ regurgitation


def test_the_same_regurgitant_volume_is_enormous_in_a_stiff_and_modest_in_a_soft_atrium() -> None:
    """Volume over compliance (common practice). The two presets' leaks are chosen so that the volumes agree."""
    found = {}
    for name in ("acute_tricuspid_regurgitation", "chronic_tricuspid_regurgitation"):
        interval = 60.0 / 80.0
        beat = Beat(regular(preset(name), rate_per_min=80.0, beats=8), 0.3 + 5 * interval, interval)
        back = float(np.maximum(-beat.whole("tricuspid"), 0).sum() / HZ)
        found[name] = back, beat.part("ra", 0.2, 0.5).max() - beat.whole("ra").mean(), beat.part("ra", 0.2, 0.5).max()
    (stiff_ml, stiff, top), (soft_ml, soft, _) = found.values()
    assert stiff_ml == pytest.approx(soft_ml, rel=0.10)
    assert stiff_ml > 30
    assert stiff > 5  # v above mean + 5 mmHg: the sign of regurgitation (seen second-hand)
    assert top > 1.5 * (top - stiff)  # and above 1.5 times the mean
    assert soft < 3
    assert stiff > 3 * soft


# ------------------------------------------------------------------ breathing


def test_spontaneous_inspiration_lowers_right_atrial_pressure() -> None:
    quiet = Breathing(rate_per_min=15, inspiration_s=1.6)
    heart = regular(beats=24, breathing=quiet)
    phase = np.mod(heart.time_s, 4.0)
    ra = heart.pressures["ra"]
    fall = ra[(phase > 3.0)].mean() - ra[(phase > 1.0) & (phase < 2.0)].mean()
    assert fall > 1.0  # mmHg; the sign that preload counts (from memory: Magder 1992)
    assert heart.pressures["pleural"].min() == pytest.approx(-8.0, abs=0.2)  # -4 to about -9 (Albanese 2016, second-hand)


def test_ventilation_raises_right_atrial_pressure_in_inspiration() -> None:
    heart = regular(beats=24, breathing=Breathing(mode="ventilated", rate_per_min=15, inspiration_s=1.6))
    phase = np.mod(heart.time_s, 4.0)
    ra = heart.pressures["ra"]
    assert ra[(phase > 1.0) & (phase < 1.8)].mean() > ra[phase > 3.0].mean() + 0.5


@pytest.mark.parametrize("peep_cmh2o", [5.0, 10.0, 15.0])
def test_a_part_of_peep_reaches_the_mean(peep_cmh2o: float) -> None:
    """0.15 to 0.49 of PEEP in four studies (facts of the project, from their abstracts)."""
    low, high = (
        regular(beats=24, breathing=Breathing(mode="ventilated", rate_per_min=12, inspiration_s=1.7, peep_cmh2o=p)).pressures["ra"].mean()
        for p in (0.0, peep_cmh2o)
    )
    assert 0.15 <= (high - low) / (peep_cmh2o * 0.735559) <= 0.49


# ------------------------------------------------------------------ parameters


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({"svc.c": -1.3}, "svc.c = -1.3: allowed are 0.01 to 500 ml/mmHg"),
        ({"arteries.c": 0.0}, "arteries.c = 0.0: allowed are 0.01"),
        ({"ra.e_rest": -0.2}, "ra.e_rest = -0.2: allowed are 0.005 to 5 mmHg/ml"),
        ({"ra.e_rest": float("nan")}, "ra.e_rest = nan: allowed"),
        ({"blood_volume_ml": 0.0}, "blood_volume_ml = 0.0: allowed are 300 to 12000 ml"),
        ({"rv.v0_ml": 1e4}, "rv.v0_ml = 10000.0: allowed are 0 to 200 ml"),
        ({"rv.e_peak": 0.01}, "rv.e_peak = 0.01 mmHg/ml: it must not be below rv.e_rest = 0.06"),
        ({"tricuspid.a_max_cm2": 0.0}, "tricuspid.a_max_cm2 = 0.0: allowed are 0.1 to 20 cm²"),
        ({"tricuspid.area": 1.0}, "no parameter 'tricuspid.area'; tricuspid has: a_max_cm2"),
        ({"tricuspid": 1.0}, "no parameter 'tricuspid'; parameters are: blood_volume_ml"),
        ({"spleen.c": 1.0}, "no parameter 'spleen.c'; parameters are: blood_volume_ml"),
    ],
)
def test_a_bad_parameter_is_named_with_its_range(values: dict[str, float], words: str) -> None:
    with pytest.raises(InputError) as caught:
        Circulation().with_values(values)
    assert words in str(caught.value)


def test_less_blood_than_the_vessels_hold_is_impossible() -> None:
    with pytest.raises(InputError, match=r"blood_volume_ml = 3000: the vessels and chambers alone hold \d+ ml; more is needed"):
        regular(Circulation().with_values({"blood_volume_ml": 3000.0}))


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"mode": "iron lung"}, "breathing.mode = 'iron lung': allowed are spontaneous, ventilated, none"),
        ({"rate_per_min": 0.0}, "breathing.rate_per_min = 0.0: allowed are 2 to 80 1/min"),
        ({"transmitted": 1.2}, "breathing.transmitted = 1.2: allowed are 0 to 1"),
        ({"rate_per_min": 60.0, "inspiration_s": 1.6}, "breathing.inspiration_s = 1.6: longer than nine tenths of a breath (1 s)"),
    ],
)
def test_a_bad_breath_is_named_with_its_range(options: dict, words: str) -> None:
    with pytest.raises(InputError) as caught:
        Breathing(**options)
    assert words in str(caught.value)


def test_a_heart_that_never_beats_or_a_length_that_cannot_be() -> None:
    with pytest.raises(InputError, match="r_times_s is empty"):
        run(Circulation(), [], [], 1.0)
    with pytest.raises(InputError, match=r"duration -1.0 s at 250.0 Hz"):
        run(Circulation(), [], [0.5], -1.0)
    with pytest.raises(InputError, match=r"at 300.0 Hz with steps of 0.0005 s"):
        run(Circulation(), [], [0.5], 1.0, rate=300.0)


def test_every_parameter_has_a_unit_a_range_and_a_source() -> None:
    def leaves(node: object) -> list:
        return [leaf for f in fields(node) for leaf in (leaves(getattr(node, f.name)) if is_dataclass(getattr(node, f.name)) else [f])]  # type: ignore[arg-type]

    found = leaves(Circulation())
    assert len(found) == len(names(Circulation()))
    for leaf in found:
        assert leaf.metadata["low"] < leaf.metadata["high"]
        assert leaf.metadata["unit"]
        assert leaf.metadata["source"]


@pytest.mark.parametrize("name", PRESETS)
def test_every_preset_says_where_its_changes_come_from_and_keeps_its_blood(name: str) -> None:
    for parameter in PRESETS[name]:
        assert "calibrated" in source(parameter, name) or "memory" in source(parameter, name)
    heart = regular(preset(name), beats=3)
    assert np.isfinite(heart.pressures["ra"]).all()
    assert np.ptp(heart.blood_ml) / heart.blood_ml[0] < 1e-9
    assert 40 < heart.pressures["arteries"].mean() < 130  # plausible at rest, shock included (own choice)


def test_what_differs_from_the_base_set_says_so() -> None:
    """Values of the base set (Heldt 2002, seen second-hand) against ours: a difference must be declared."""
    base = {
        "ra": (14, 0.30, 0.74), "la": (24, 0.50, 0.61), "rv": (46, 0.05, 1.3), "lv": (55, 0.11, 2.5),
    }
    adult = Circulation()
    for chamber, values in base.items():
        for part, value in zip(("v0_ml", "e_rest", "e_peak"), values, strict=True):
            same = getattr(getattr(adult, chamber), part) == value
            assert ("calibrated" in source(f"{chamber}.{part}")) != same
    assert source("svc.c") == "Heldt 2002"
    assert replace(adult, blood_volume_ml=5000.0).blood_volume_ml == 5000.0
    with pytest.raises(InputError, match=r"no parameter 'svc\.colour'"):
        source("svc.colour")
