"""Tables of the contract: the way blocks are cut does not show in the rows."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from caval import tables
from caval.model.sketch import sketch
from caval.vocabulary import WAVES

END_S = 100.0
cuts = st.lists(st.floats(0.5, END_S - 0.5), max_size=8).map(lambda inner: [0.0, *sorted(set(inner)), END_S])


def blocks(table: pd.DataFrame, edges: list[float], margin_s: float) -> list[tuple[float, float, pd.DataFrame]]:
    """What stages give: the rows of each core and of its margins."""
    time = table[tables.time_column(table)].to_numpy(float)
    end = time + table["duration_s"].to_numpy(float) if "duration_s" in table else time
    return [(a, b, table[(end >= a - margin_s) & (time <= b + margin_s)]) for a, b in pairwise(edges)]


@given(cuts, st.floats(0, 30))
def test_marks_do_not_depend_on_the_cut(edges: list[float], margin_s: float) -> None:
    time = np.linspace(0.1, END_S - 0.1, 300)
    marks = pd.DataFrame({"time_s": time, "mark": "a", "beat": 0, "pressure_mmhg": time, "confidence": 1.0, "state": "clear"})
    pd.testing.assert_frame_equal(tables.join_blocks("marks", blocks(marks, edges, margin_s)), marks)


@given(cuts, st.floats(0, 30))
def test_beats_do_not_depend_on_the_cut(edges: list[float], margin_s: float) -> None:
    r = np.arange(0.3, END_S, 0.83)
    beats = pd.DataFrame({"beat": -1, "r_time_s": r, "r_sd_s": 0.0, "rr_s": np.nan, "source": "ecg", "confidence": 1.0})
    joined = tables.join_blocks("beats", blocks(beats, edges, margin_s))
    assert joined["beat"].tolist() == list(range(len(r)))
    np.testing.assert_array_equal(joined["r_time_s"], r)
    np.testing.assert_allclose(joined["rr_s"].to_numpy()[1:], 0.83)


span_rows = st.tuples(st.floats(0, 90), st.floats(0.1, 10), st.sampled_from(["flat", "noise"]), st.sampled_from(["CVP", "II"]))


@given(cuts, st.floats(0, 30), st.lists(span_rows, max_size=8))
def test_spans_do_not_depend_on_the_cut(edges: list[float], margin_s: float, rows: list[tuple[float, float, str, str]]) -> None:
    spans = pd.DataFrame([(*row, "") for row in rows], columns=list(tables.SCHEMAS["spans"])).astype(tables.SCHEMAS["spans"])
    whole = tables.join_blocks("spans", [(0.0, END_S, spans)])
    cut = tables.join_blocks("spans", blocks(spans, edges, margin_s))
    assert len(whole) == len(cut)
    np.testing.assert_allclose(cut[["onset_s", "duration_s"]], whole[["onset_s", "duration_s"]], atol=1e-5)
    assert cut[["kind", "channel"]].equals(whole[["kind", "channel"]])


def test_a_beat_seen_from_two_blocks_counts_once() -> None:
    """Two blocks may put the R of one beat a few milliseconds either side of their common edge."""
    row = {"beat": 0, "r_sd_s": 0.0, "rr_s": np.nan, "source": "ecg", "confidence": 1.0}
    parts = [(0.0, 10.0, pd.DataFrame([{"r_time_s": 9.998, **row}])), (10.0, 20.0, pd.DataFrame([{"r_time_s": 10.001, **row}]))]
    assert len(tables.join_blocks("beats", parts)) == 1


@pytest.mark.parametrize("name", tables.SCHEMAS)
def test_nothing_found_keeps_the_columns(name: str) -> None:
    for parts in ([], [(0.0, 10.0, tables.empty(name))]):
        joined = tables.join_blocks(name, parts)
        assert list(joined.columns) == list(tables.SCHEMAS[name])
        assert len(joined) == 0


def test_overlaps_name_the_first_span() -> None:
    spans = pd.DataFrame([(0.0, 10.0, "flat", "CVP", ""), (2.0, 1.0, "noise", "CVP", "")], columns=list(tables.SCHEMAS["spans"]))
    got = tables.overlaps(np.array([2.1, 9.9, 10.0, -5.0]), np.array([2.2, 12.0, 11.0, 0.0]), spans)
    assert got.tolist() == [0, 0, -1, -1]  # touching is not overlapping


def drawn() -> tuple[pd.DataFrame, pd.DataFrame, pd.DataFrame]:
    truth = sketch(minutes=0.3, seed=3)
    r = truth.r_times_s
    beats = tables.number_beats(
        pd.DataFrame({"beat": 0, "r_time_s": r, "r_sd_s": 0.0, "rr_s": np.nan, "source": "ecg", "confidence": 1.0})
    )
    marks = truth.marks.assign(confidence=0.9, state="clear")
    readings = pd.DataFrame({"beat": beats["beat"], "r_time_s": r, "usable": True, "reason": "", "x_pre_mmhg": 1.0, "mean_mmhg": 7.0})
    return beats, marks, readings


def test_beat_table_has_the_columns_of_the_contract_first_and_keeps_further_ones() -> None:
    beats, marks, readings = drawn()
    table = tables.beat_table(beats, marks, readings.assign(area_mmhg_s=3.0))
    assert list(table.columns) == [*tables.BEAT_COLUMNS, "area_mmhg_s"]
    assert len(table) == len(beats)


def test_beat_table_repeats_the_marks() -> None:
    beats, marks, readings = drawn()
    table = tables.beat_table(beats, marks, readings).set_index("beat")
    for mark in marks.itertuples():
        assert table.at[mark.beat, f"{mark.mark}_time_s"] == mark.time_s
        assert table.at[mark.beat, f"{mark.mark}_mmhg"] == mark.pressure_mmhg
        assert table.at[mark.beat, f"{mark.mark}_state"] == "clear"


def test_absent_is_absent_and_unusable_is_said() -> None:
    beats, marks, readings = drawn()
    readings.loc[2, ["usable", "reason"]] = [False, "flat"]
    table = tables.beat_table(beats, marks[(marks["mark"] != "v") & (marks["beat"] != 2)], readings)
    assert set(table["v_state"].drop(2)) == {"absent"}
    assert table["v_time_s"].isna().all()
    assert {table.at[2, f"{w}_state"] for w in WAVES} == {"unusable"}
    assert (table.at[2, "reason"], bool(table.at[2, "usable"])) == ("flat", False)


def test_several_a_waves_before_one_r_keep_the_last() -> None:
    beats, marks, readings = drawn()
    first = marks[(marks["mark"] == "a") & (marks["beat"] == 5)].iloc[0]
    earlier = first.to_dict() | {"time_s": first["time_s"] - 0.3, "confidence": 1.0}
    table = tables.beat_table(beats, pd.concat([marks, pd.DataFrame([earlier])]), readings)
    assert table.at[5, "a_time_s"] == first["time_s"]


def test_without_readings_no_beat_is_usable_and_none_is_lost() -> None:
    beats, marks, _ = drawn()
    table = tables.beat_table(beats, marks, None)
    assert len(table) == len(beats)
    assert not table["usable"].any()
    assert set(table["reason"]) == {"not measured"}
