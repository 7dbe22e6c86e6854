"""How well `caval mark` finds the waves of simulated patients, against what is true of them; run by hand, never asserted.

    python tests/benchmarks/bench_truth.py                         # the table: each rhythm and heart, noise, delay, breathing
    python tests/benchmarks/bench_truth.py --plot reliability.png  # and how often marks of each confidence are right
    python tests/benchmarks/bench_truth.py paced fibrillation      # some scenarios
    python tests/benchmarks/bench_truth.py --calibrate             # weights for stages/_confidence.py, from other patients (seed 11)

Counted are the truth's extrema at least three times as prominent as the noise is in the waves' band (12 Hz), outside what disturbed the
line, and marks that are not fused; a true wave that is marked as fused is left out, as the contract has it. A mark is right within 30 ms of
a true one, 25 ms for the confidence (own choices: no published tolerance exists).
"""

from __future__ import annotations

import argparse
import importlib
import warnings
from collections.abc import Iterator
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd
from scipy.optimize import minimize

import caval
from caval.agree import match_events
from caval.model.scenario import load_scenario, scenario_names
from caval.model.simulate import Simulation, simulate
from caval.stages import _confidence
from caval.tables import overlaps

WINDOW_S, SURE_S, FUSED_S = 0.030, 0.025, 0.060
BAND_HZ, RATE_HZ = 12.0, 125.0
WAVES = ("a", "c", "x", "v", "y")
NOISES_MMHG, DELAYS_S = (0.05, 0.15, 0.30), (0.0, 0.03, 0.06)
VENTILATED = {"breathing.mode": "ventilated", "breathing.rate_per_min": 13, "breathing.inspiration_s": 1.6, "breathing.peep_cmh2o": 5}
RATES = {"healthy": (40, 50, 60, 80, 90, 100), "tachycardia": (110, 120, 130, 140, 160, 180), "fibrillation": (60, 120, 150)}
GROUPS = {
    "healthy": "sinus 40–100/min", "tachycardia": "sinus 110–180/min", "first_degree_block": "long PR",
    "premature_beats": "premature beats", "fibrillation": "fibrillation", "complete_block": "complete block",
    "junctional": "junctional", "paced": "paced",
}
"""Rhythms in a healthy heart; the other scenarios are hearts of their own in sinus rhythm."""


@dataclass(frozen=True)
class Case:
    scenario: str
    settings: dict[str, Any]
    minutes: float
    seed: int


@dataclass
class Found:
    """Counts and errors of one wave."""

    true: int = 0
    hit: int = 0
    marked: int = 0
    right: int = 0
    errors_ms: list[float] = field(default_factory=list)

    def add(self, other: Found) -> None:
        for name in ("true", "hit", "marked", "right"):
            setattr(self, name, getattr(self, name) + getattr(other, name))
        self.errors_ms += other.errors_ms


@dataclass
class Told:
    """What one case gives: counts by wave, beats, a of fibrillation, cannon waves, rhythm words, and the confidence of each mark."""

    case: Case
    waves: dict[str, Found]
    beats: tuple[int, int, int]
    beats_with_a: float
    cannon: tuple[int, int]
    rhythm: dict[str, int]
    delay: tuple[float, float, float]
    marks: dict[str, tuple[np.ndarray, np.ndarray, np.ndarray]]


def cases(names: list[str], minutes: float, seed: int) -> Iterator[Case]:
    """Each scenario at three noises with delays and breathing in turn, and the heart rates of some."""
    for i, name in enumerate(names):
        ventilated = load_scenario(name).breathing != ({"mode": "spontaneous"},)
        turns: list[dict[str, Any]] = [_line(k, k + i) for k in range(3)]
        for j, rate in enumerate(RATES.get(name, ())):
            turns += [{"rhythm.heart_rate": rate, **_line(j + k, j + k + 1)} for k in (0, 2)]
        for k, settings in enumerate(turns):
            yield Case(name, settings | (VENTILATED if (k + i) % 2 and not ventilated else {}), 4.0 if ventilated else minutes, seed + k)


def _line(noise: int, delay: int) -> dict[str, float]:
    return {"line.noise_mmhg": NOISES_MMHG[noise % 3], "line.delay_s": DELAYS_S[delay % 3]}


def run(case: Case) -> Told:
    warnings.simplefilter("ignore")
    made = simulate(case.scenario, minutes=case.minutes, seed=case.seed, settings=case.settings)
    result = caval.mark(made.recording)
    band = case.settings["line.noise_mmhg"] * (2 * BAND_HZ / RATE_HZ) ** 0.5
    truth = made.truth
    beats = match_events(truth.rhythm.r_times_s, result.beats["r_time_s"], window_s=0.05)
    cannon = truth.marks[(truth.marks["mark"] == "a") & (truth.marks["detail"] == "cannon") & (truth.marks["prominence_mmhg"] >= 3 * band)]
    tall = _outside(np.sort(cannon["time_s"].to_numpy(float)), made)
    seen = match_events(tall, _times(result.marks, "a"), window_s=WINDOW_S)
    with_a = result.beats["a_state"].isin(["clear", "weak", "fused"])
    return Told(
        case,
        {wave: compare(made, result, wave, 3 * band) for wave in WAVES},
        (len(truth.rhythm.r_times_s), len(beats.reference), len(result.beats)),
        float(with_a.mean()),
        (len(tall), len(seen.reference)),
        result.beats["rhythm"].value_counts().to_dict(),
        (result.run["delay_s"], result.run["delay_sd_s"], truth.delay_s),
        {wave: _confidences(made, result, wave) for wave in WAVES},
    )


def compare(made: Simulation, result: caval.Result, wave: str, least_mmhg: float) -> Found:
    true = made.truth.marks[(made.truth.marks["mark"] == wave) & made.truth.marks["time_s"].notna()].sort_values("time_s")
    found = result.marks[result.marks["mark"] == wave]
    every = _outside(true["time_s"].to_numpy(float), made)
    tall = _outside(true.loc[true["prominence_mmhg"] >= least_mmhg, "time_s"].to_numpy(float), made)
    seen = _outside(_times(found[found["state"] != "fused"], wave), made)
    fused = np.append(_times(found[found["state"] == "fused"], wave), np.inf)
    hit, right = match_events(tall, seen, window_s=WINDOW_S), match_events(every, seen, window_s=WINDOW_S)
    left_out = int((np.abs(tall[hit.missed][:, None] - fused[None, :]).min(axis=1) < FUSED_S).sum()) if len(hit.missed) else 0
    errors = 1000 * (seen[hit.found] - tall[hit.reference])
    return Found(len(tall) - left_out, len(hit.reference), len(seen), len(right.found), errors.tolist())


def _confidences(made: Simulation, result: caval.Result, wave: str) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Confidence of each mark, whether it is right, and whether it is an extremum's."""
    found = result.marks[(result.marks["mark"] == wave) & (result.marks["state"] != "fused")].sort_values("time_s")
    time = found["time_s"].to_numpy(float)
    true = np.sort(made.truth.marks.loc[made.truth.marks["mark"] == wave, "time_s"].dropna().to_numpy(float))
    near = np.abs(np.append(true, np.inf)[np.searchsorted(true, time)] - time)
    near = np.minimum(near, np.abs(np.append(-np.inf, true)[np.searchsorted(true, time)] - time))
    keep = np.isin(time, _outside(time, made))
    return found["confidence"].to_numpy(float)[keep], (near <= SURE_S)[keep], time[keep]


def _times(marks: pd.DataFrame, wave: str) -> np.ndarray:
    return np.sort(marks.loc[marks["mark"] == wave, "time_s"].to_numpy(float))


def _outside(times: np.ndarray, made: Simulation) -> np.ndarray:
    """Times a second and more away from the ends and from what disturbed the line."""
    spans = made.truth.spans[made.truth.spans["channel"] == "CVP"]
    inner = times[(times > 1.0) & (times < made.recording.duration_s - 1.0)]
    return inner[overlaps(inner - 1.0, inner + 1.0, spans) < 0]


def table(told: list[Told]) -> None:
    groups: dict[str, list[Told]] = {}
    for one in told:
        groups.setdefault(GROUPS.get(one.case.scenario, one.case.scenario), []).append(one)
    order = [g for g in GROUPS.values() if g in groups] + [g for g in groups if g not in GROUPS.values()]
    print(f"{'':28}" + "".join(f"{w + ': sens prec  ms':>22}" for w in WAVES) + f"{'R: sens prec':>16}  other")
    for group in order:
        pooled = {wave: Found() for wave in WAVES}
        for one in groups[group]:
            for wave in WAVES:
                pooled[wave].add(one.waves[wave])
        true, hit, found = (sum(one.beats[k] for one in groups[group]) for k in range(3))
        cells = "".join(f"{_cell(pooled[w]):>22}" for w in WAVES)
        print(f"{group:28}{cells}{hit / true:9.3f} {hit / max(found, 1):.3f}  {_other(groups[group])}", flush=True)
    good = [abs(d - t) <= 2 * sd for d, sd, t in (one.delay for one in told) if d is not None]
    print(f"delay within two standard deviations: {np.mean(good):.2f} of {len(good)} records")


def _cell(found: Found) -> str:
    if not found.true:
        return f"none, {found.marked} marked"
    precision = found.right / found.marked if found.marked else np.nan
    error = np.median(np.abs(found.errors_ms)) if found.errors_ms else np.nan
    return f"{found.hit / found.true:.3f} {precision:.3f} {error:4.1f}"


def _other(told: list[Told]) -> str:
    said = []
    if told[0].case.scenario == "fibrillation":
        said.append(f"beats with an a: {np.mean([one.beats_with_a for one in told]):.3f}")
    tall, seen = (sum(one.cannon[k] for one in told) for k in range(2))
    if tall:
        said.append(f"cannon a: {seen / tall:.3f} of {tall}")
    words = pd.DataFrame([one.rhythm for one in told]).sum().sort_values(ascending=False)
    share = words / words.sum()
    said.append(", ".join(f"{word} {100 * value:.0f} %" for word, value in share.items() if value >= 0.005))
    return "; ".join(said)


def reliability(told: list[Told], path: str | None) -> None:
    """Of the marks that say so much, how many are right; printed, and drawn when a path is given."""
    edges = np.array([0.0, 0.5, 0.7, 0.8, 0.9, 0.95, 0.98, 1.0])
    rows = {}
    for wave in (*WAVES, "all"):
        parts = [one.marks[w] for one in told for w in (WAVES if wave == "all" else (wave,))]
        said, right = (np.concatenate([part[k] for part in parts]) for k in range(2))
        bins = np.clip(np.digitize(said, edges) - 1, 0, len(edges) - 2)
        filled = [bins == k for k in range(len(edges) - 1) if (bins == k).any()]
        rows[wave] = [(said[one].mean(), right[one].mean(), int(one.sum())) for one in filled]
    print("confidence said → right within 25 ms (marks), all waves: " + ", ".join(f"{s:.2f} → {r:.2f} ({n})" for s, r, n in rows["all"]))
    if path is None:
        return
    import matplotlib as mpl

    mpl.use("Agg")
    from matplotlib import pyplot as plt

    from caval.vocabulary import WAVES as TERMS

    figure, axes = plt.subplots(figsize=(6, 6))
    axes.plot([0, 1], [0, 1], color="0.8")
    for wave in WAVES:
        said, right, count = np.array(rows[wave]).T
        axes.plot(said, right, "-", color=TERMS[wave].color, lw=1)
        axes.scatter(said, right, s=10 + 12 * np.log10(count), color=TERMS[wave].color, label=f"{wave} ({int(count.sum())})")
    axes.set(xlabel="confidence of the mark", ylabel=f"right within {1000 * SURE_S:.0f} ms", title="Reliability on simulated patients")
    axes.legend(title="wave (marks); larger: more marks", frameon=False)
    figure.savefig(path, dpi=120)
    print(f"figure: {path}")


def calibrate(some: list[Case]) -> None:
    """Print the weights of the logistic model of each wave, fitted to the marks of some cases."""
    seen: dict[str, list[tuple[np.ndarray, np.ndarray]]] = {wave: [] for wave in WAVES}
    caught: list[tuple[str, np.ndarray]] = []

    def catch(wave: str, evidence: np.ndarray) -> np.ndarray:
        caught.append((wave, evidence))
        return np.where(~np.isnan(evidence).any(axis=1), np.arange(len(evidence)) / 1e6, -1.0)  # a number to know the row by

    module = importlib.import_module("caval.stages._found")
    module.confidence = catch  # type: ignore[attr-defined]
    for case in some:
        caught.clear()
        made = simulate(case.scenario, minutes=case.minutes, seed=case.seed, settings=case.settings)
        result = caval.Pipeline(block_s=6000.0).run(made.recording)
        marks = result["marks"]
        for wave in WAVES:
            evidence = next(e for w, e in caught if w == wave)
            found = marks[(marks["mark"] == wave) & (marks["confidence"] >= 0)]
            stand_in = type("R", (), {"marks": found})
            said, right, _ = _confidences(made, stand_in, wave)  # type: ignore[arg-type]
            rows = np.rint(said * 1e6).astype(int)
            keep = rows < len(evidence)
            seen[wave].append((_confidence.design(evidence[rows[keep]]), right[keep]))
    for wave in WAVES:
        x, y = (np.concatenate([pair[k] for pair in seen[wave]]) for k in range(2))
        sign = np.where(y, 1.0, -1.0)

        def loss(w: np.ndarray, x: np.ndarray = x, sign: np.ndarray = sign) -> float:
            return float(np.mean(np.logaddexp(0, -sign * (x @ w))) + 1e-3 * np.sum(w[1:] ** 2))

        weights = np.round(minimize(loss, np.zeros(x.shape[1])).x, 2)
        knots = _steps(1.0 / (1.0 + np.exp(-(x @ weights))), y)
        said = [", ".join(f"{value:g}" for value in row) for row in (weights, *knots.T)]
        print(f'    "{wave}": (({said[0]}), ({said[1]}), ({said[2]})),  # {len(y)} marks, {y.mean():.3f} right', flush=True)


def _steps(said: np.ndarray, right: np.ndarray, least: int = 60) -> np.ndarray:
    """What is right of the marks that say so much, in bins of at least `least` marks, never falling: rows of (said, right)."""
    order = np.argsort(said)
    edges = np.searchsorted(said[order], [0.4, 0.6, 0.7, 0.8, 0.86, 0.9, 0.93, 0.96, 0.98, 0.99])
    bins = [part for part in np.split(order, edges) if len(part)]
    pools: list[list[np.ndarray]] = []
    for part in bins:
        pools.append([part])
        while len(pools) > 1 and (
            right[np.concatenate(pools[-2])].mean() >= right[np.concatenate(pools[-1])].mean() or sum(map(len, pools[-2])) < least
        ):
            last = pools.pop()
            pools[-1] += last
    rows = [np.concatenate(pool) for pool in pools]
    return np.array([(round(float(said[k].mean()), 3), round(float(right[k].mean()), 3)) for k in rows])


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("scenario", nargs="*", help="names; all by default")
    parser.add_argument("--minutes", type=float, default=2.0)
    parser.add_argument("--seed", type=int, default=101)
    parser.add_argument("--plot", metavar="FILE", help="draw the reliability of the confidence")
    parser.add_argument("--calibrate", action="store_true")
    chosen = parser.parse_args()
    names = chosen.scenario or [n for n in scenario_names() if n != "theatre"]
    if chosen.calibrate:
        warnings.simplefilter("ignore")
        calibrate(list(cases(names, chosen.minutes, 11)))
        return
    with ProcessPoolExecutor(2) as pool:
        told = list(pool.map(run, cases(names, chosen.minutes, chosen.seed)))
    table(told)
    reliability(told, chosen.plot)


if __name__ == "__main__":
    main()
