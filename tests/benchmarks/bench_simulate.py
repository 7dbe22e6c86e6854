"""Seconds and memory for an hour of simulated recording on one core; run by hand, never asserted.

    python tests/benchmarks/bench_simulate.py                       # healthy, one hour
    python tests/benchmarks/bench_simulate.py theatre --minutes 10 --repeats 3

The first run of a fresh process compiles (or loads from numba's cache); a record of six seconds is made first, and its time is told apart.
The aim for an hour is under 20 s. Peak memory is that of the whole process, libraries included.
"""

from __future__ import annotations

import argparse
import cProfile
import os
import pstats
import resource
import sys
import time

for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

AIM_S = 20.0


def peak_mb() -> float:
    """Highest resident memory of the process so far."""
    used = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return used / (2**20 if sys.platform == "darwin" else 2**10)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("scenario", nargs="?", default="healthy")
    parser.add_argument("--minutes", type=float, default=60.0)
    parser.add_argument("--repeats", type=int, default=1)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--profile", type=int, default=0, metavar="N", help="the N functions that took the most time")
    options = parser.parse_args()

    from caval.model.simulate import simulate

    if hasattr(os, "sched_setaffinity"):
        os.sched_setaffinity(0, {min(os.sched_getaffinity(0))})
    before = peak_mb()
    start = time.perf_counter()
    simulate(options.scenario, minutes=0.1, seed=options.seed)
    seconds = time.perf_counter() - start
    print(f"compilation and 6 s of record   {seconds:7.2f} s   {peak_mb():7.0f} MB at the peak (libraries {before:.0f} MB)")
    profile = cProfile.Profile() if options.profile else None
    for _ in range(options.repeats):
        start = time.perf_counter()
        if profile:
            profile.enable()
        made = simulate(options.scenario, minutes=options.minutes, seed=options.seed)
        if profile:
            profile.disable()
        seconds = time.perf_counter() - start
        an_hour = seconds * 60.0 / options.minutes
        beats, marks = len(made.truth.rhythm.r_times_s), len(made.truth.marks)
        name = f"{options.scenario}, {options.minutes:g} min"
        print(f"{name:<31} {seconds:7.2f} s   {peak_mb():7.0f} MB at the peak; {beats} beats, {marks} marks")
        print(f"an hour                         {an_hour:7.2f} s   aim {AIM_S:g} s: {'met' if an_hour < AIM_S else 'not met'}")
    if profile:
        pstats.Stats(profile).sort_stats("tottime").print_stats(options.profile)


if __name__ == "__main__":
    main()
