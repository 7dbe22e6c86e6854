"""Tracks: columns in time order, nothing lost by joining, beats and marks found among other people's annotations."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from caval import tables
from caval.errors import InputError
from caval.track import Track
from caval.vocabulary import WAVES

times = st.lists(st.floats(-10, 1e6, allow_nan=False), max_size=40)


@given(times)
def test_rows_are_sorted_and_keep_their_text(onsets: list[float]) -> None:
    texts = [f"t{i % 5}" for i in range(len(onsets))]
    track = Track.build(onsets, texts)
    assert len(track) == len(onsets)
    assert (np.diff(track.onset_s) >= 0).all()
    order = np.argsort(np.asarray(onsets), kind="stable")
    assert list(track.text) == [texts[i] for i in order]


@given(times, times)
def test_joining_loses_nothing_and_does_not_depend_on_order(first: list[float], second: list[float]) -> None:
    a, b = Track.build(first, ["a"] * len(first)), Track.build(second, ["b"] * len(second))
    for joined in (a.join(b), b.join(a)):
        assert sorted(zip(joined.onset_s, joined.text, strict=True)) == sorted([(t, "a") for t in first] + [(t, "b") for t in second])


def test_what_a_format_holds_beyond_travels_along() -> None:
    a = Track.build([2.0, 1.0], ["", ""], extra={"symbol": np.array(["V", "N"], dtype=object), "num": np.array([3, 4])})
    b = Track.build([1.5], ["note"])
    joined = a.join(b)
    assert list(joined.extra["symbol"]) == ["N", "", "V"]
    assert list(joined.extra["num"]) == [4, 0, 3]
    assert list(joined.take(joined.onset_s > 1.2).extra["symbol"]) == ["", "V"]


def test_an_empty_track_is_neutral() -> None:
    a = Track.build([1.0], ["x"])
    assert a.join(Track.empty()) is a
    assert Track.empty().join(a) is a
    assert len(Track.empty().join(Track.empty())) == 0
    assert list(Track.empty().text) == []


def test_columns_of_different_lengths_are_refused() -> None:
    with pytest.raises(InputError, match="2 onsets, 1 texts"):
        Track.build([1.0, 2.0], ["x"])
    good = Track.build([1.0, 2.0], ["x", "y"])
    with pytest.raises(InputError, match="one length"):
        Track(good.onset_s, good.duration_s[:1], good.code, good.texts, good.channel)


def test_our_tables_become_a_track_and_come_back() -> None:
    marks = pd.DataFrame({"time_s": np.arange(len(WAVES)) / 10, "mark": list(WAVES)})
    rows = [(0.2, 0.3, "flat", "P2", ""), (5.0, 1.0, "noise", "II", ""), (7.0, 1.0, "gap", "X9", "")]
    spans = pd.DataFrame(rows, columns=list(tables.SCHEMAS["spans"]))
    track = Track.from_tables(marks, spans, channels={"II": 0, "P2": 1}, roles={"cvp": "P2", "ecg": "II"})
    assert {"BAD_CVP/flat", "BAD_ECG/noise", "BAD_X9/gap"} <= set(track.texts)
    pd.testing.assert_frame_equal(track.marks().astype({"mark": object}), marks.astype({"mark": object}))
    channel = dict(zip(track.text, track.channel, strict=True))
    assert (channel["CVP/a"], channel["BAD_CVP/flat"], channel["BAD_ECG/noise"], channel["BAD_X9/gap"]) == (1, 1, 0, -1)


def test_marks_leave_other_annotations_out() -> None:
    track = Track.build([0.0, 1.0, 2.0, 3.0], ["Lights off", "CVP/v", "a", "BAD_CVP/flat"])
    assert track.marks().to_dict("list") == {"time_s": [1.0], "mark": ["v"]}


def test_beats_by_wfdb_symbol() -> None:
    symbols = np.array(["+", "N", "V", '"', "|", "A", "p"], dtype=object)
    track = Track.build(np.arange(7.0), [""] * 7, extra={"symbol": symbols})
    assert list(track.beat_times_s()) == [1.0, 2.0, 5.0]  # rhythm, note, artefact and P wave are no beats


def test_beats_by_text_and_by_bare_times() -> None:
    assert list(Track.build([2.0, 1.0, 1.5], ["R", "QRS", "cough"]).beat_times_s()) == [1.0, 2.0]
    assert list(Track.build([2.0, 1.0, 1.0], [""] * 3).beat_times_s()) == [1.0, 2.0]
    assert len(Track.empty().beat_times_s()) == 0


def test_a_track_without_beats_says_what_it_saw() -> None:
    with pytest.raises(InputError, match="cough"):
        Track.build([1.0], ["cough"]).beat_times_s()
