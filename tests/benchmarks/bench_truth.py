"""How well `caval mark` finds the waves of simulated patients, against what is true of them; run by hand, never asserted.

    python tests/benchmarks/bench_truth.py                       # every scenario, two minutes each
    python tests/benchmarks/bench_truth.py healthy fibrillation  # some of them
    python tests/benchmarks/bench_truth.py --noise 0.3 --minutes 5 --seed 3

Counted are truth extrema at least three times as prominent as the noise, outside the spans in which the line was disturbed, and marks that
are not fused. A mark is right within 30 ms (own choice: no published tolerance exists).
"""

from __future__ import annotations

import argparse
import warnings
from typing import Any

import numpy as np
import pandas as pd

import caval
from caval.agree import match_events
from caval.model.scenario import scenario_names
from caval.model.simulate import Simulation, simulate
from caval.tables import overlaps

WINDOW_S = 0.030
WAVES = ("a", "c", "x", "v", "y")


def compare(made: Simulation, result: caval.Result, noise_mmhg: float) -> pd.DataFrame:
    """Sensitivity, precision and median error of each wave, and those of the beats."""
    disturbed = made.truth.spans[made.truth.spans["channel"] == "CVP"]
    rows = []
    for wave in WAVES:
        truth = made.truth.marks[(made.truth.marks["mark"] == wave) & made.truth.marks["time_s"].notna()]
        sure = truth["prominence_mmhg"] >= 3 * noise_mmhg
        found = result.marks[(result.marks["mark"] == wave) & (result.marks["state"] != "fused")]
        times, seen = (np.sort(t["time_s"].to_numpy(float)) for t in (truth[sure], found))
        all_times = np.sort(truth["time_s"].to_numpy(float))
        times, seen, all_times = (_outside(t, disturbed, made) for t in (times, seen, all_times))
        hit = match_events(times, seen, window_s=WINDOW_S)
        right = match_events(all_times, seen, window_s=WINDOW_S)
        error = seen[hit.found] - times[hit.reference]
        rows.append((wave, len(times), hit.sensitivity, right.precision, 1000 * float(np.median(np.abs(error))) if len(error) else np.nan))
    beats = match_events(made.truth.rhythm.r_times_s, result.beats["r_time_s"], window_s=0.05)
    rows.append(("R", len(made.truth.rhythm.r_times_s), beats.sensitivity, beats.precision, np.nan))
    return pd.DataFrame(rows, columns=["wave", "n", "sensitivity", "precision", "error_ms"])


def _outside(times: np.ndarray, spans: pd.DataFrame, made: Simulation) -> np.ndarray:
    edge = (times > 1.0) & (times < made.recording.duration_s - 1.0)
    return times[edge & (overlaps(times - 1.0, times + 1.0, spans) < 0)]


def _cell(row: Any) -> str:
    return f"{row.sensitivity:.3f}/{row.precision:.3f} {row.error_ms:5.1f}" if row.n else f"none ({row.precision:.2f})"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("scenario", nargs="*", help="names; all by default")
    parser.add_argument("--minutes", type=float, default=2.0)
    parser.add_argument("--noise", type=float, default=0.05, help="mmHg on every sample")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--set", nargs="*", default=[], metavar="KEY=VALUE")
    chosen = parser.parse_args()
    warnings.simplefilter("ignore")
    settings = {k: float(v) for k, v in (s.split("=") for s in chosen.set)} | {"line.noise_mmhg": chosen.noise}
    print(f"{'scenario':<28}" + "".join(f"{w:>22}" for w in (*WAVES, "R")))
    print(" " * 28 + f"{'sens/prec  error ms':>22}" * 6)
    for name in chosen.scenario or scenario_names():
        made = simulate(name, minutes=chosen.minutes, seed=chosen.seed, settings=settings)
        table = compare(made, caval.mark(made.recording), chosen.noise)
        cells = [_cell(row) for row in table.itertuples()]
        print(f"{name:<28}" + "".join(f"{c:>22}" for c in cells), flush=True)


if __name__ == "__main__":
    main()
