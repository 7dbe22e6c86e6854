"""The figure: an honest picture of any result, drawn without reading more than it shows and without touching global state."""

from __future__ import annotations

import sys
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from matplotlib.figure import Figure

from caval import tables
from caval.api import given_beats
from caval.model.sketch import Sketch, sketch
from caval.pipeline import Pipeline
from caval.recording import Channel, Recording
from caval.report._beat import wave_summary
from caval.report._strip import STRIP_S, choose_strip
from caval.report._trend import window_quartiles
from caval.report.figure import FOOTER, figure
from caval.result import Result
from caval.roles import assign_roles
from caval.vocabulary import WAVES


def as_found(
    drawn: Sketch, *, channels: tuple[str, ...] | None = None, spans: tuple[tuple[Any, ...], ...] = (), usable: bool = True
) -> Result:
    """The drawn truth as if stages had found it; beats under a span carry no marks."""
    recording = drawn.recording
    if channels is not None:
        recording = replace(recording, channels=tuple(c for c in recording.channels if c.label in channels))
    beats = given_beats(drawn.r_times_s)
    shaded = pd.DataFrame(list(spans), columns=list(tables.SCHEMAS["spans"])).astype(tables.SCHEMAS["spans"])
    r = beats["r_time_s"].to_numpy()
    good = (tables.overlaps(r - 0.2, r + 0.8, shaded[shaded["channel"] == "CVP"].reset_index(drop=True)) < 0) & usable
    marks = drawn.marks.assign(confidence=0.9, state="clear")
    marks = marks[good[marks["beat"]]]
    readings = pd.DataFrame({"beat": beats["beat"], "r_time_s": r, "usable": good, "reason": "", "x_pre_mmhg": np.nan, "mean_mmhg": 7.0})
    done = {"beats": beats, "marks": marks, "spans": shaded, "readings": readings}
    return Result.build(recording, assign_roles(recording), done, pipeline=Pipeline(), stretch=(0.0, None), units={})


def words(drawn: Figure) -> str:
    from matplotlib.text import Text

    return "\n".join(t.get_text() for t in drawn.findobj(Text))


@pytest.fixture(scope="module")
def two_minutes() -> Sketch:
    return sketch(minutes=2)


def test_title_counts_and_caution(two_minutes: Sketch) -> None:
    result = as_found(two_minutes)
    said = words(figure(result))
    assert "demo" in said
    assert "2 min" in said
    assert f"{len(result.beats)} beats, {result.beats['usable'].sum()} usable" in said
    assert f"{len(result.marks)} marks" in said
    assert FOOTER in said
    assert "not a medical device" in said
    assert "CVP  mmHg" in said  # units on the axes
    assert "ECG  mV" in said


@pytest.mark.parametrize("channels", [("CVP",), ("CVP", "ABP"), ("CVP", "ECG II"), ("CVP", "ABP", "ECG II")])
def test_a_panel_for_every_role_that_is_there(two_minutes: Sketch, channels: tuple[str, ...]) -> None:
    drawn = figure(as_found(two_minutes, channels=channels))
    labels = [ax.get_ylabel() for ax in drawn.axes]
    for role, label in (("ECG  mV", "ECG II"), ("ABP  mmHg", "ABP")):
        assert (role in labels) == (label in channels)


def test_a_result_without_marks_says_why(two_minutes: Sketch, tmp_path: Path) -> None:
    result = as_found(two_minutes, spans=((0.0, 120.0, "disconnected", "CVP", "no pulse"),), usable=False)
    drawn = figure(result)
    drawn.savefig(tmp_path / "x.png")
    said = " ".join(words(drawn).split())
    assert result.warnings[0] in said
    assert "disconnected" in said
    assert "no usable beat" in said


@pytest.mark.parametrize("minutes", [0.01, 0.03, 0.2, 95.0])
def test_records_of_any_length(minutes: float, tmp_path: Path) -> None:
    figure(as_found(sketch(minutes=minutes, ecg_rate=50, pressure_rate=50))).savefig(tmp_path / "x.png")


def test_missing_values_are_drawn_as_missing(two_minutes: Sketch, tmp_path: Path) -> None:
    arrays: dict[str, Any] = {c.label: (np.full(c.n_samples, np.nan), c.sampling_rate, c.unit) for c in two_minutes.recording.channels}
    figure(as_found(replace(two_minutes, recording=Recording.from_arrays(arrays)), usable=False)).savefig(tmp_path / "x.png")


def test_the_strip_avoids_what_is_shaded(two_minutes: Sketch) -> None:
    start, stop = choose_strip(as_found(two_minutes, spans=((0.0, 80.0, "flat", "CVP", ""), (100.0, 20.0, "noise", "ECG II", ""))))
    assert stop - start == pytest.approx(STRIP_S)
    assert start >= 80.0
    assert stop <= 100.0


def test_the_strip_starts_before_an_r_and_lies_within(two_minutes: Sketch) -> None:
    result = as_found(two_minutes)
    start, stop = choose_strip(result)
    assert 0 <= start < stop <= result.recording.duration_s
    assert np.abs(two_minutes.r_times_s - 0.35 - start).min() < 1e-9


def test_the_median_beat_repeats_the_truth(two_minutes: Sketch) -> None:
    """Of drawn waves the median time after R and the median pressure are those of the drawn extrema."""
    for found in wave_summary(as_found(two_minutes)):
        rows = two_minutes.marks[two_minutes.marks["mark"] == found.wave]
        after = rows["time_s"].to_numpy() - two_minutes.r_times_s[rows["beat"]]
        assert found.time_s[1] == pytest.approx(np.median(after), abs=1e-3)
        assert found.mmhg[1] == pytest.approx(rows["pressure_mmhg"].median(), abs=0.02)
        assert found.share > 0.9
        assert found.wave in WAVES


def test_windows_with_few_beats_are_left_empty() -> None:
    time = np.array([1.0, 2.0, 3.0, 11.0, 12.0, 21.0, 22.0, 23.0])
    value = np.array([5.0, 6.0, 7.0, 1.0, 1.0, 2.0, np.nan, 4.0])
    quartiles = window_quartiles(time, value, np.array([0.0, 10.0, 20.0, 30.0]))
    assert quartiles[:, 0].tolist() == [5.5, 6.0, 6.5]
    assert np.isnan(quartiles[:, 1:]).all()


def test_little_is_read_of_a_long_record() -> None:
    """Six hours: the strip and at most two hundred beats, some minutes of each channel, in small pieces."""
    read: list[int] = []

    def counting(source: Callable[[int, int], Any], hour: int) -> Callable[[int, int], Any]:
        def get(start: int, stop: int) -> Any:
            read.append(stop - start)
            first = start % hour
            last = first + stop - start
            return source(first, last) if last <= hour else np.zeros(stop - start)

        return get

    drawn = sketch(minutes=10, ecg_rate=125)
    r = np.concatenate([drawn.r_times_s + 600 * k for k in range(36)])
    once, n = drawn.marks, len(drawn.r_times_s)
    marks = pd.concat([once.assign(time_s=once["time_s"] + 600 * k, beat=once["beat"] + n * k) for k in range(36)], ignore_index=True)

    def long(c: Channel) -> Channel:
        return replace(c, n_samples=c.n_samples * 36, source=counting(c.source, c.n_samples))

    recording = replace(drawn.recording, channels=tuple(long(c) for c in drawn.recording.channels))
    figure(as_found(Sketch(recording, r, marks)))
    total = sum(c.n_samples for c in recording.channels)
    assert sum(read) < 0.05 * total
    assert max(read) < 20 * 125


def test_no_window_and_no_global_state(two_minutes: Sketch) -> None:
    import matplotlib as mpl

    before = dict(mpl.rcParams)
    had_pyplot = "matplotlib.pyplot" in sys.modules
    drawn = figure(as_found(two_minutes))
    assert dict(mpl.rcParams) == before
    assert ("matplotlib.pyplot" in sys.modules) == had_pyplot
    assert type(drawn.canvas).__name__ == "FigureCanvasAgg"
