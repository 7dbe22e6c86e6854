"""The way back from a wave to volume and compliance, on patients whose volumes and compliances are known."""

import numpy as np
import pytest

import caval
from caval.model.atrium import Interval, explain, height_of
from caval.model.compliance import effective_compliance
from caval.model.simulate import Simulation, simulate

QUIET = {"breathing.mode": "none", "line.noise_mmhg": 0.02}


@pytest.fixture(scope="module")
def patients() -> dict[str, Simulation]:
    return {name: simulate(name, minutes=0.6, settings=QUIET) for name in ("acute_regurgitation", "chronic_regurgitation", "healthy")}


def _filling(made: Simulation) -> tuple[np.ndarray, np.ndarray]:
    """Volume (ml) and pressure (mmHg) that the atrium gains from its least pressure in early systole to the top of v, beat by beat.

    Read in the vessel: the model's own volume and pressure, on the vessel's clock.
    """
    heart, truth = made.truth.heart, made.truth
    v = truth.marks[(truth.marks["mark"] == "v") & truth.marks["time_s"].notna()].set_index("beat")["time_s"]
    gained, risen = [], []
    for beat, r in enumerate(truth.rhythm.r_times_s[2:-2], start=2):
        if beat not in v.index:
            continue
        top = round((v[beat] - truth.delay_s) * heart.rate)
        start = round(r * heart.rate)
        foot = start + int(np.argmin(heart.pressures["ra"][start:top]))
        gained.append(heart.volumes["ra"][top] - heart.volumes["ra"][foot])
        risen.append(heart.pressures["ra"][top] - heart.pressures["ra"][foot])
    return np.array(gained), np.array(risen)


def _measured_heights(made: Simulation) -> np.ndarray:
    """Height of v above the lowest recorded point between R and v, from our own marks."""
    marks = caval.mark(made.recording).marks
    cvp = made.recording.channel("CVP").signal()
    v = marks[marks["mark"] == "v"].set_index("beat")
    r = made.truth.rhythm.r_times_s
    heights = []
    for beat, row in v.iterrows():
        before = r[r < row["time_s"] - 0.1]
        if len(before):
            inside = (cvp.time_s > before[-1]) & (cvp.time_s < row["time_s"])
            heights.append(row["pressure_mmhg"] - cvp.values[inside].min())
        del beat
    return np.array(heights[2:-2])


def _through_the_line(made: Simulation, heights: Interval) -> Interval:
    """The height in the vessel: the line adds up to its gain at 5 Hz, the fastest that a venous wave holds much of, to what it passes."""
    gain = float(made.scenario.measuring().gain(5.0))  # 1.13 at 14 Hz and damping 0.25, by the second-order formula
    return Interval(heights.low / gain, heights.high)


@pytest.mark.parametrize("name", ["acute_regurgitation", "healthy"])
def test_a_known_volume_gives_back_the_compliance(patients, name):
    gained, risen = _filling(patients[name])
    true_compliance = np.median(gained / risen)
    heights = height_of(_measured_heights(patients[name]))
    wide = _through_the_line(patients[name], heights)
    answer = explain(wide, volume_ml=Interval.of(float(np.median(gained)), 0.05 * float(np.median(gained))))
    low, high = answer.compliance_range_ml_per_mmhg
    assert low <= true_compliance <= high
    assert answer.is_bounded
    assert high / low < 2.0


def test_the_trace_alone_cannot_tell(patients):
    answer = explain(height_of(_measured_heights(patients["acute_regurgitation"])))
    assert not answer.is_bounded
    assert "does not say" in answer.statement


def test_the_same_regurgitation_is_told_apart_by_its_volume(patients):
    # A large regurgitant volume into a soft atrium may show no tall v; a small stiff one shows an enormous one (common practice).
    ranges = {}
    for name in ("acute_regurgitation", "chronic_regurgitation"):
        gained, _ = _filling(patients[name])
        volume = float(np.median(gained))
        heights = height_of(_measured_heights(patients[name]))
        answer = explain(_through_the_line(patients[name], heights), volume_ml=Interval.of(volume, 0.1 * volume))
        ranges[name] = answer.compliance_range_ml_per_mmhg
    assert ranges["acute_regurgitation"][1] < ranges["chronic_regurgitation"][0]


def test_paired_steps_give_back_the_compliance_of_the_wall():
    # Beats of different size are paired steps of volume and pressure of one wall; the ring and leaflets move little between them.
    made = simulate("healthy", minutes=0.8, settings={"line.noise_mmhg": 0.0})
    gained, risen = _filling(made)
    rng = np.random.default_rng(4)
    read = risen + 0.05 * rng.standard_normal(len(risen))
    ratio = effective_compliance(gained, read)
    truth = float(np.sum(gained * gained) / np.sum(gained * risen))
    assert ratio.low <= truth * 1.02
    assert ratio.high >= truth * 0.98
