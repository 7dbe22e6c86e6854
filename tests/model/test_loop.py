"""The integrator in irregular beats, at block boundaries and at its limits. Values of the healthy adult are in test_circulation."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import pytest

from caval.errors import InputError
from caval.model import circulation
from caval.model.circulation import Breathing, Haemodynamics, Infusion, run
from caval.model.heart import Activation
from caval.model.parameters import Heart, preset

HZ = 500.0
INTERVAL_S = 60.0 / 70.0
R = 0.3 + INTERVAL_S * np.arange(-34, 13)
P = R - 0.16


def still(p: Iterable[float], r: Iterable[float], name: str = "healthy", duration_s: float = 10.0, **options: float) -> Haemodynamics:
    """A heart whose chest does not move."""
    return run(preset(name), list(p), list(r), duration_s, breathing=Breathing(mode="none"), **{"rate": HZ, "warm_up_s": 29.0} | options)


# ------------------------------------------------------------------ irregular beats


def premature() -> tuple[np.ndarray, int]:
    """R times with one beat four tenths of an interval early, and its place; the pause after it is compensatory."""
    early = int(np.searchsorted(R, 3.0))
    beats = R.copy()
    beats[early] -= 0.4 * INTERVAL_S
    return beats, early


def test_the_ring_does_not_jump_at_r_after_a_pause() -> None:
    """The ring is not pulled before the ventricle has tension, 15 ms after R: what moves in 20 ms is small, whatever the beat before.

    2 ml make half a millimetre in an atrium of 4 ml/mmHg (own choice). The early beat itself is left out: there the ring is still on its
    way back from the beat before.
    """
    beats, early = premature()
    ring = still(P, beats).volumes["annulus"]
    for i, beat in enumerate(beats):
        if 1.0 < beat < 9.0 and i != early:
            at = round(beat * HZ)
            assert abs(ring[at + 10] - ring[at]) < 2.0


def test_a_beat_after_a_pause_makes_no_fall_at_r() -> None:
    """A silent atrium has nothing that could lower its pressure between R and the ring's descent (fibrillation with pauses)."""
    beats, early = premature()
    ra = still([], beats).pressures["ra"]
    at = round(beats[early + 1] * HZ)
    assert np.diff(ra[at : at + 16]).min() > -0.004  # mmHg in 2 ms: 2 mmHg/s, a tenth of a slow descent


def test_half_the_step_changes_next_to_nothing_where_walls_are_stiff() -> None:
    """0.1 mmHg rms, what a monitor resolves, in every pressure: a shell, a leak and a stiff atrium strain the step most."""
    for name in ("healthy", "constriction", "acute_tricuspid_regurgitation", "child"):
        usual, half = (still(P, R, name, 4.0, rate=250.0, step_s=step) for step in (0.0005, 0.00025))
        for where, trace in usual.pressures.items():
            assert np.sqrt(np.mean((trace - half.pressures[where]) ** 2)) < 0.1, (name, where)


def test_ventricular_contractions_last_longer_after_longer_intervals() -> None:
    slow, usual, fast = (Activation.of(Heart(), [], np.arange(20) * 60.0 / rate).ventricular_peak[-1] for rate in (50.0, 70.0, 140.0))
    assert slow > usual > fast


def test_atrial_contractions_fit_into_their_interval() -> None:
    """Of one length up to 150/min, so that a and c run together in tachycardia (facts: telling them apart is often impossible)."""
    usual, tachycardia, flutter = (Activation.of(Heart(), np.arange(20) * 60.0 / rate, [0.0]).atrial_length[-1] for rate in (70, 150, 300))
    assert usual == tachycardia == Heart().atrium_length_s
    assert flutter == pytest.approx(0.10)


def test_activation_stays_between_0_and_1_and_is_smooth() -> None:
    """However close the beats are: 400/min atrial, and an early beat within the one before."""
    time = np.arange(0, 4.0, 0.0005)
    active = Activation.of(Heart(), np.arange(0, 4, 0.15), [0.2, 0.9, 1.2, 2.0, 3.5])
    for curve in (active.atrium(time), active.ventricle(time)):
        assert curve.min() >= 0
        assert curve.max() <= 1.001  # the published normaliser, 1.55, is rounded
        assert np.abs(np.diff(curve)).max() < 0.05
    assert not Activation.of(Heart(), [], [0.0]).atrium(time).any()


# ------------------------------------------------------------------ blocks


def test_the_length_of_a_block_does_not_matter(monkeypatch: pytest.MonkeyPatch) -> None:
    """To 1e-9 mmHg: the last bit of a time may differ, nothing else."""
    breaths = [(0.0, Breathing()), (4.0, Breathing(mode="ventilated"))]
    found = []
    for block_s in (60.0, 7.3, 1.0):
        monkeypatch.setattr(circulation, "_BLOCK_S", block_s)
        given = [Infusion(2.0, 4.0, 50.0)]
        found.append(run(preset("healthy"), P, premature()[0], 9.0, breathing=breaths, infusions=given, warm_up_s=20.0))
    for name, trace in found[0].pressures.items():
        for other in found[1:]:
            np.testing.assert_allclose(other.pressures[name], trace, atol=1e-9)


# ------------------------------------------------------------------ what cannot be


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"duration_s": float("nan")}, "duration nan s"), ({"rate": 0.0}, "at 0.0 Hz"), ({"rate": -250.0}, "at -250.0 Hz"),
        ({"step_s": 0.0}, "steps of 0.0 s"), ({"step_s": 0.01, "rate": 50.0}, "a step at most 0.002 s"),
        ({"warm_up_s": float("inf")}, "warm_up_s"), ({"r_times_s": [0.0, float("nan")]}, "r_times_s"),
        ({"p_times_s": [float("inf")]}, "p_times_s"),
    ],
)
def test_a_run_that_cannot_be_is_named(options: dict, words: str) -> None:
    with pytest.raises(InputError) as caught:
        run(preset("healthy"), **{"p_times_s": P, "r_times_s": R, "duration_s": 2.0} | options)
    assert words in str(caught.value)


@pytest.mark.parametrize(
    ("values", "words"), [({"ivc.c": 0.02}, "ivc.c = 0.02: "), ({"ra.e_peak": 20.0}, "ra.e_peak = 20: "), ({"arteries.c": 0.01}, "")]
)
def test_what_the_step_cannot_follow_is_named(values: dict[str, float], words: str) -> None:
    """Never NaN without a word: such a part empties within a step."""
    hard = preset("healthy").with_values(values)
    if words:
        with pytest.raises(InputError, match=f"{words}.*allowed is at (least|most)"):
            run(hard, P, R, 2.0)
    else:  # follows, if barely: then the numbers are sound
        assert np.isfinite(run(hard, P, R, 2.0).pressures["ra"]).all()


def test_a_heart_that_bleeds_out_is_an_error() -> None:
    with pytest.raises(InputError, match=r"holds -\d+ ml at \d+ s, which cannot be: give more blood_volume_ml"):
        still(P, R, infusions=[Infusion(1.0, 8.0, -4900.0)])


@pytest.mark.parametrize("values", [{"duration_s": 0.0}, {"volume_ml": float("nan")}, {"onset_s": float("inf")}])
def test_an_infusion_that_cannot_be_is_named(values: dict[str, float]) -> None:
    name = next(iter(values))
    with pytest.raises(InputError, match=rf"infusions\.{name} = .*: allowed are"):
        Infusion(**{"onset_s": 1.0, "duration_s": 10.0, "volume_ml": 100.0} | values)
