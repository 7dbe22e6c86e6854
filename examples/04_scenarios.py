"""A figure of every simulated patient and one page of them all: NAME.png and overview.png in the folder given (default: scenarios).

    python examples/04_scenarios.py
    python examples/04_scenarios.py FOLDER

Letters stand on the true marks; a wave without an extremum has none. The dotted line is the R peak. Where a scenario changes over time,
the page shows six seconds after the change too.
"""

import sys
import textwrap
from pathlib import Path

import matplotlib

matplotlib.use("Agg")
import matplotlib.pyplot as plt
import numpy as np

from caval.model.scenario import scenario_names
from caval.model.simulate import simulate

SECONDS = 6.0
STARTS = {  # seconds; what changes is shown before and after
    "hypovolaemia_bolus": (20.0, 240.0),
    "peep_steps": (41.0, 221.0),
    "theatre": (42.0, 320.0),
    "premature_beats": (8.0, 28.0),
}
COLOURS = {"a": "#1b6ca8", "c": "#6b6b6b", "x": "#2a7f3f", "v": "#b3372f", "y": "#8a5a00"}

folder = Path(sys.argv[1] if len(sys.argv) > 1 else "scenarios")
folder.mkdir(parents=True, exist_ok=True)


def draw(lead, trace, made, start_s, *, letters=9.0):
    """ECG above, venous pressure with its true marks below."""
    stop_s = start_s + SECONDS
    ecg = made.recording.channel("ECG II").signal(start_s, stop_s)
    lead.plot(ecg.time_s, ecg.values, color="black", lw=0.6)
    lead.set_axis_off()
    lead.set_xlim(start_s, stop_s)

    clean = made.truth.clean_mmhg
    time = np.arange(len(clean)) / made.recording.channel("CVP").sampling_rate
    shown = (time >= start_s) & (time < stop_s)
    trace.plot(time[shown], clean[shown], color="#1f2d3d", lw=1.0)
    low, high = np.percentile(clean[shown], (0, 100))
    low, high = max(low, -15.0), min(high, 40.0)  # a flush goes off the page
    space = max(high - low, 3.0)
    trace.set_ylim(low - 0.22 * space, high + 0.22 * space)
    trace.set_xlim(start_s, stop_s)
    marks = made.truth.marks
    for mark in marks[marks["time_s"].between(start_s + 0.03, stop_s - 0.03)].itertuples():
        down = mark.mark in "xy"
        text = f"{mark.mark}!" if mark.detail == "cannon" else mark.mark
        trace.annotate(
            text, (mark.time_s, mark.pressure_mmhg), xytext=(0, -3 if down else 2), textcoords="offset points", ha="center",
            va="top" if down else "bottom", fontsize=letters, color=COLOURS[mark.mark], clip_on=True,
        )
    for r in made.truth.rhythm.r_times_s:
        trace.axvline(r, color="0.7", lw=0.5, ls=":")
    trace.spines[["top", "right"]].set_visible(False)
    trace.tick_params(labelsize=7)


def head(made):
    pressure = made.truth.heart.pressures["ra"]
    numbers = f"mean {pressure.mean():.1f} mmHg, {made.truth.heart.cardiac_output_l_min:.1f} l/min"
    return made.scenario.title, made.scenario.shows, numbers


names = scenario_names()
columns = 2
rows = -(-len(names) // columns)
page = plt.figure(figsize=(15, 2.5 * rows), layout="constrained")
panels = page.subfigures(rows, columns).ravel()
for panel, name in zip(panels, names, strict=False):
    starts = STARTS.get(name, (8.0,))
    made = simulate(name, minutes=(max(starts) + SECONDS + 4.0) / 60.0)
    title, shows, numbers = head(made)

    single = plt.figure(figsize=(9, 3.6 * len(starts)), layout="constrained")
    axes = single.subplots(2 * len(starts), 1, height_ratios=[1, 4] * len(starts), squeeze=False)[:, 0]
    for k, start_s in enumerate(starts):
        draw(axes[2 * k], axes[2 * k + 1], made, start_s)
        axes[2 * k + 1].set_ylabel("CVP, mmHg")
    axes[-1].set_xlabel("seconds")
    single.suptitle(f"{title}: {numbers}\n" + textwrap.fill(shows, 110), fontsize=10)
    single.savefig(folder / f"{name}.png", dpi=110)
    plt.close(single)

    cells = panel.subplots(2, len(starts), height_ratios=[1, 4], squeeze=False)
    for k, start_s in enumerate(starts):
        draw(cells[0, k], cells[1, k], made, start_s, letters=7.0)
    panel.suptitle(textwrap.fill(f"{title}: {shows}", 110), fontsize=8)
page.savefig(folder / "overview.png", dpi=90)
print(f"{len(names)} figures and overview.png in {folder}")
