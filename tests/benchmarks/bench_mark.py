"""Seconds and peak memory of `caval mark`, from an EDF file to the written output; run by hand, never asserted.

    python tests/benchmarks/bench_mark.py                  # one hour, six hours, NeuroKit2 beside the hour, the help
    python tests/benchmarks/bench_mark.py --hours 1        # the hour alone
    python tests/benchmarks/bench_mark.py --record my.edf  # a record of your own

Every case runs in a process of its own, so that its peak memory is its own: the highest resident size that the kernel saw, imports
included. The records are drawn (ECG 500 Hz, CVP and ABP 125 Hz); a long one repeats a drawn hour, piece by piece.
"""

from __future__ import annotations

import argparse
import json
import resource
import statistics
import subprocess
import sys
import tempfile
import time
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

PIECE_H = 1.0


def make(path: Path, hours: float) -> None:
    """Write a drawn record of that length; only an hour of it is ever in memory before writing."""
    import caval
    from caval.recording import Channel

    piece = caval.demo_recording(minutes=60 * min(hours, PIECE_H))

    def repeated(channel: Channel) -> Channel:
        stored, n = channel.digital(), channel.n_samples
        return replace(channel, n_samples=round(hours * 3600 * channel.sampling_rate), source=lambda a, b: stored[np.arange(a, b) % n])

    caval.write(replace(piece, channels=tuple(repeated(c) for c in piece.channels)), path)


def mark(path: Path, out: Path) -> dict[str, Any]:
    """`caval mark`, as the command line runs it; the seconds are those of the command, not of starting Python."""
    from caval.cli import main

    begin = time.perf_counter()
    code = main(["mark", str(path), "--out", str(out), "--quiet"])
    seconds = time.perf_counter() - begin
    if code:
        raise SystemExit(f"caval mark ended with {code}")
    counts = json.loads((out / f"{path.stem}_run.json").read_text(encoding="utf-8"))["counts"]
    return {"seconds": seconds, "what": f"{counts['beats']} beats, {sum(counts['marks'].values())} marks"}


def stages(path: Path) -> dict[str, Any]:
    """The pipeline in process, from the file to the tables, by stage; neither importing nor a first run, which loads code, is counted."""
    import caval
    from caval.pipeline import Pipeline

    recording = caval.read(path)
    taken: dict[str, float] = {}
    for _ in range(2):
        taken.clear()
        last = time.perf_counter()

        def progress(stage: str, _share: float) -> None:
            nonlocal last
            now = time.perf_counter()
            taken[stage] = taken.get(stage, 0.0) + now - last
            last = now

        Pipeline().run(recording, progress=progress)
    return {"seconds": sum(taken.values()), "what": ", ".join(f"{stage} {seconds:.2f}" for stage, seconds in taken.items())}


def host(path: Path) -> dict[str, Any]:
    """`neurokit2.ecg_process` on the same ECG; reading and importing not counted."""
    import warnings

    import caval
    from caval.roles import assign_roles

    warnings.simplefilter("ignore")
    import neurokit2

    recording = caval.read(path)
    ecg = recording.channel(assign_roles(recording)["ecg"])
    values = ecg.physical()
    begin = time.perf_counter()
    _, info = neurokit2.ecg_process(values, sampling_rate=int(ecg.sampling_rate))
    return {"seconds": time.perf_counter() - begin, "what": f"{len(info['ECG_R_Peaks'])} R peaks"}


def peak_mb() -> float:
    """Highest resident size of this process so far; Linux counts in kB, macOS in bytes."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return peak / (1e6 if sys.platform == "darwin" else 1e3)


def in_a_process(*arguments: str) -> dict[str, Any]:
    """Run one case of this script in a process of its own and return what it measured."""
    done = subprocess.run([sys.executable, __file__, "--case", *arguments], capture_output=True, text=True, check=False)
    if done.returncode:
        raise SystemExit(done.stderr.strip() or f"case {arguments} failed")
    measured: dict[str, Any] = json.loads(done.stdout.splitlines()[-1])
    return measured


def run_case(name: str, *paths: str) -> None:
    """The other side of `in_a_process`."""
    if name == "make":
        make(Path(paths[0]), float(paths[1]))
        measured: dict[str, Any] = {}
    else:
        case = {"mark": mark, "stages": stages, "host": host}[name]
        measured = case(*(Path(path) for path in paths))
    say(json.dumps(measured | {"peak_mb": peak_mb()}))


def help_seconds(times: int = 5) -> float:
    """Median of the whole of ``caval --help``, Python's start included."""
    command = Path(sys.executable).with_name("caval")
    taken = []
    for _ in range(times):
        begin = time.perf_counter()
        subprocess.run([str(command), "--help"], capture_output=True, check=True)
        taken.append(time.perf_counter() - begin)
    return statistics.median(taken)


def say(text: str) -> None:
    sys.stdout.write(text + "\n")
    sys.stdout.flush()


def row(name: str, measured: dict[str, Any]) -> None:
    say(f"{name:<34} {measured['seconds']:8.1f} s {measured['peak_mb']:8.0f} MB   {measured['what']}")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--hours", type=float, nargs="*", default=[1.0, 6.0], help="lengths of the drawn records")
    parser.add_argument("--record", type=Path, help="a record of your own instead")
    parser.add_argument("--no-host", action="store_true", help="without neurokit2.ecg_process")
    parser.add_argument("--case", nargs="+", help=argparse.SUPPRESS)
    asked = parser.parse_args()
    if asked.case:
        run_case(*asked.case)
        return
    with tempfile.TemporaryDirectory() as folder:
        records = {asked.record.stem: asked.record} if asked.record else {}
        for hours in [] if asked.record else asked.hours:
            records[f"{hours:g} h"] = Path(folder) / f"bench_{hours:g}h.edf"
            in_a_process("make", str(records[f"{hours:g} h"]), str(hours))
        for i, (name, path) in enumerate(records.items()):
            ours = in_a_process("mark", str(path), str(Path(folder) / f"out_{i}"))
            row(f"caval mark, {name}", ours)
            if i == 0 and not asked.no_host:
                theirs = in_a_process("host", str(path))
                inside = in_a_process("stages", str(path))
                row(f"our detectors and stages, {name}", inside)
                row(f"neurokit2.ecg_process, {name}", theirs)
                seconds, memory = ours["seconds"] / theirs["seconds"], ours["peak_mb"] / theirs["peak_mb"]
                say(f"{'ratio, caval to neurokit2':<34} {seconds:8.2f}   {memory:8.2f}")
                say(f"{'ratio, stages to neurokit2':<34} {inside['seconds'] / theirs['seconds']:8.3f}")
    say(f"{'caval --help':<34} {help_seconds():8.2f} s")


if __name__ == "__main__":
    main()
