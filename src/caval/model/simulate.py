"""A recording of a simulated patient, with everything that is true of it."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval import registry
from caval._files import write_all
from caval.model.circulation import Haemodynamics, run
from caval.model.ecg import ecg
from caval.model.events import Diathermy, spoil_ecg
from caval.model.line import Line, measure
from caval.model.rhythm import Rhythm, schedule
from caval.model.scenario import Scenario, load_scenario
from caval.model.truth import beat_truth, wave_truth
from caval.recording import Calibration, Recording
from caval.track import Track

__all__ = ["Simulation", "Truth", "simulate"]

_RUN_IN_S = 25.0
_MODEL_RATE_HZ = 500.0
_ECG_RATE_HZ = 500.0
_PRESSURE_RATE_HZ = 125.0
_ARTERY = Line(natural_frequency_hz=16.0, damping=0.35, delay_s=0.075, lowpass_hz=40.0, noise_mmhg=0.2, range_mmhg=(-50.0, 300.0))
"""Line of the radial artery; its delay holds the pulse's way there (calibrated to 0.15 to 0.25 s from R to the foot; common practice)."""


@dataclass(frozen=True, eq=False)
class Truth:
    """What is true of a simulated record.

    Attributes
    ----------
    marks : DataFrame
        ``time_s, mark, beat, pressure_mmhg, prominence_mmhg, state, detail``: extrema of the noise-free pressure after the line, on the
        recorded clock; a wave without one is ``fused``.
    beats : DataFrame
        ``beat, r_time_s, kind, p_time_s`` and volumes, see `caval.model.truth.beat_truth`.
    breaths : DataFrame
        ``onset_s``: start of each inspiration.
    spans : DataFrame
        ``onset_s, duration_s, kind, channel, detail``: what happened to the line and the ECG.
    rhythm : Rhythm
    heart : Haemodynamics
        Pressures, volumes and flows of the model at 500 Hz, on the clock of the vessel.
    delay_s : float
        Delay of slow waves from the vessel to the recorded trace.
    clean_mmhg : float64 array
        The recorded venous trace without noise, movement and quantisation.
    """

    marks: pd.DataFrame
    beats: pd.DataFrame
    breaths: pd.DataFrame
    spans: pd.DataFrame
    rhythm: Rhythm
    heart: Haemodynamics
    delay_s: float
    clean_mmhg: NDArray[np.float64]

    @property
    def track(self) -> Track:
        """The truth as annotations: ``truth/a``, ``truth/R``, ``truth/P``, ``truth/inspiration``, ``truth/flush`` …"""
        seen = self.marks[self.marks["time_s"].notna()]
        parts = [
            (seen["time_s"].to_numpy(float), seen["mark"].tolist(), 0.0),
            (self.rhythm.r_times_s, ["R"] * len(self.rhythm.r_times_s), 0.0),
            (self.rhythm.p_times_s, ["P"] * len(self.rhythm.p_times_s), 0.0),
            (self.breaths["onset_s"].to_numpy(float), ["inspiration"] * len(self.breaths), 0.0),
            (self.spans["onset_s"].to_numpy(float), self.spans["kind"].tolist(), self.spans["duration_s"].to_numpy(float)),
        ]
        track = Track.empty()
        for onset, words, lasts in parts:
            track = track.join(Track.build(onset, [f"truth/{w}" for w in words], duration_s=lasts))
        return track


@dataclass(frozen=True, eq=False)
class Simulation:
    """A simulated recording and its truth."""

    scenario: Scenario
    recording: Recording
    truth: Truth
    seed: int = 1

    def summary(self) -> dict[str, Any]:
        """What was simulated, and what is true of the whole record: delay, output, mean pressures."""
        heart = self.truth.heart
        means = {f"{name}_mean_mmhg": round(float(values.mean()), 3) for name, values in heart.pressures.items()}
        return {
            **asdict(self.scenario),
            "seed": self.seed,
            "delay_s": self.truth.delay_s,
            "cardiac_output_l_min": round(heart.cardiac_output_l_min, 3),
            **means,
        }

    def write(self, path: str | Path, *, force: bool = False) -> list[Path]:
        """Write the record with the truth as annotations, and STEM_truth_marks.csv, _beats.csv, _spans.csv and STEM_truth.json beside it.

        Raises
        ------
        FileError
            A file exists and `force` is not set, or no format writes that ending.
        """
        path = Path(path)
        writer = registry.format_for(path, "write").write
        assert writer is not None

        def make(folder: Path) -> None:
            writer(self.recording.with_track("truth", self.truth.track), folder / path.name)
            for name, rows in (("marks", self.truth.marks), ("beats", self.truth.beats), ("spans", self.truth.spans)):
                rows.to_csv(folder / f"{path.stem}_truth_{name}.csv", index=False)
            said = json.dumps(self.summary(), indent=2, ensure_ascii=False) + "\n"
            (folder / f"{path.stem}_truth.json").write_text(said, encoding="utf-8")

        return write_all(path.parent, make, force=force)


def simulate(
    scenario: Scenario | str | Path, *, minutes: float | None = None, seed: int = 1, settings: Mapping[str, Any] | None = None
) -> Simulation:
    """Simulate a patient: ECG II (500 Hz), CVP and ABP (125 Hz), as 16-bit integers.

    Parameters
    ----------
    scenario : Scenario, name or path of a .toml file
    minutes : float, optional
        Length; the scenario's own by default.
    seed : int
        The same seed gives the same record, to the bit, on one machine.
    settings : mapping, optional
        Changes, see `Scenario.with_settings`.

    Raises
    ------
    InputError
        A value outside its range, by name.

    Examples
    --------
    >>> healthy = simulate("healthy", minutes=0.25)
    >>> healthy.recording.labels
    ('ECG II', 'CVP', 'ABP')
    """
    chosen = scenario if isinstance(scenario, Scenario) else load_scenario(scenario)
    chosen = chosen.with_settings({**(settings or {}), **({} if minutes is None else {"minutes": float(minutes)})})
    duration_s = chosen.minutes * 60.0
    run_in, beats = _rhythm(chosen, duration_s, seed)
    breaths = chosen.breaths()
    heart = run(
        chosen.model(), run_in.p_times_s - _RUN_IN_S, run_in.r_times_s - _RUN_IN_S, duration_s, breathing=breaths,
        infusions=chosen.gifts(), rate=_MODEL_RATE_HZ, warm_up_s=_RUN_IN_S,
    )
    line, events = chosen.measuring(), chosen.happenings()
    seeds = [int(s) for s in np.random.SeedSequence(seed).generate_state(4)]
    cvp = measure(heart.pressures["ra"], _MODEL_RATE_HZ, line, events, sampling_rate=_PRESSURE_RATE_HZ, channel="CVP", seed=seeds[0])
    fine = measure(heart.pressures["ra"], _MODEL_RATE_HZ, line, events, sampling_rate=_MODEL_RATE_HZ, channel="CVP", seed=seeds[0])
    abp = measure(heart.pressures["arteries"], _MODEL_RATE_HZ, _ARTERY, (), sampling_rate=_PRESSURE_RATE_HZ, channel="ABP", seed=seeds[1])
    lead = ecg(beats, duration_s, _ECG_RATE_HZ, noise_mv=chosen.ecg_noise_mv, seed=seeds[2])
    lead = spoil_ecg(lead, _ECG_RATE_HZ, events, seed=seeds[3])
    marks = wave_truth(fine.clean_mmhg, _MODEL_RATE_HZ, fine.delay_s, beats, heart, spans=cvp.spans)
    starts = _inspirations(breaths, duration_s)
    noisy = [(e.onset_s, e.duration_s, "noise", "ECG II", "diathermy") for e in events if isinstance(e, Diathermy)]
    spans = pd.concat([cvp.spans, pd.DataFrame(noisy, columns=cvp.spans.columns)], ignore_index=True) if noisy else cvp.spans
    truth = Truth(marks, beat_truth(beats, heart), pd.DataFrame({"onset_s": starts}), spans, beats, heart, cvp.delay_s, cvp.clean_mmhg)
    return Simulation(chosen, _recording(chosen.name, lead, cvp.digital, abp.digital, cvp.calibration), truth, seed)


def _rhythm(scenario: Scenario, duration_s: float, seed: int) -> tuple[Rhythm, Rhythm]:
    """The rhythm with its run-in (its clock begins there), and the rhythm of the record alone."""
    parts = [{**part, "onset_s": part["onset_s"] + (_RUN_IN_S if i else 0.0)} for i, part in enumerate(scenario.schedule())]
    parts = [part for part in parts if part["onset_s"] < _RUN_IN_S + duration_s]
    whole = schedule(parts, _RUN_IN_S + duration_s + 2.0, seed=seed)
    return whole, whole.cut(_RUN_IN_S, _RUN_IN_S + duration_s)


def _inspirations(breaths: list[tuple[float, Any]], duration_s: float) -> NDArray[np.float64]:
    stops = [onset for onset, _ in breaths[1:]] + [duration_s]
    return np.concatenate([b.starts_s(max(0.0, onset), stop) for (onset, b), stop in zip(breaths, stops, strict=True)])


def _recording(name: str, lead: NDArray, cvp: NDArray, abp: NDArray, pressure: Calibration) -> Recording:
    millivolts = Calibration(-32767, 32767, -32.767, 32.767)
    arrays = {
        "ECG II": (millivolts.to_digital(lead).astype(np.int16), _ECG_RATE_HZ, "mV"),
        "CVP": (cvp.astype(np.int16), _PRESSURE_RATE_HZ, "mmHg"),
        "ABP": (abp.astype(np.int16), _PRESSURE_RATE_HZ, "mmHg"),
    }
    return Recording.from_arrays(arrays, name=name, calibrations={"ECG II": millivolts, "CVP": pressure, "ABP": pressure})
