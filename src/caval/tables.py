"""The tables of the contract: columns, and how the rows of blocks become one table."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval.errors import InputError
from caval.vocabulary import WAVES

__all__ = ["BEAT_COLUMNS", "SCHEMAS", "beat_table", "clip_spans", "empty", "join_blocks", "overlaps", "rhythm_stretches", "time_column"]

SCHEMAS: dict[str, dict[str, str]] = {
    "candidates": {"time_s": "f8", "detector": "object"},
    "beats": {"beat": "i8", "r_time_s": "f8", "r_sd_s": "f8", "rr_s": "f8", "source": "object", "confidence": "f8", "kind": "object"},
    "atria": {"time_s": "f8", "beat": "i8", "coupled": "bool", "pr_s": "f8", "confidence": "f8"},
    "coupling": {"beat": "i8", "r_time_s": "f8", "p": "object", "pr_s": "f8", "confidence": "f8"},
    "rhythms": {"beat": "i8", "r_time_s": "f8", "rhythm": "object"},
    "delay": {
        "time_s": "f8", "delay_s": "f8", "delay_sd_s": "f8", "p_a_s": "f8", "p_a_n": "i8", "r_c_s": "f8", "r_c_n": "i8", "basis": "object",
    },
    "marks": {"time_s": "f8", "mark": "object", "beat": "i8", "pressure_mmhg": "f8", "confidence": "f8", "state": "object"},
    "spans": {"onset_s": "f8", "duration_s": "f8", "kind": "object", "channel": "object", "detail": "object"},
    "readings": {"beat": "i8", "r_time_s": "f8", "usable": "bool", "reason": "object", "x_pre_mmhg": "f8", "mean_mmhg": "f8"},
}
"""Columns and dtypes of the tables that stages pass on."""

BEAT_COLUMNS: tuple[str, ...] = (
    "beat", "r_time_s", "r_sd_s", "rr_s", "source", "usable", "reason", "rhythm",
    *(f"{w}_{part}" for w in WAVES for part in ("time_s", "mmhg", "state")),
    "x_pre_mmhg", "mean_mmhg",
)
"""Columns of STEM_beats, in order; later stages add, never rename."""

_REFRACTORY_S = 0.15
"""Two beats closer than this are one beat seen from two blocks."""


def empty(name: str) -> pd.DataFrame:
    """The table called `name` without rows."""
    return pd.DataFrame({column: pd.Series(dtype=kind) for column, kind in SCHEMAS[name].items()})


def time_column(table: pd.DataFrame) -> str:
    """The column that says when a row is."""
    for column in ("r_time_s", "onset_s", "time_s"):
        if column in table.columns:
            return column
    has = ", ".join(map(str, table.columns)) or "no column"
    raise InputError(f"a table of a stage needs one of r_time_s, onset_s, time_s; it has: {has}")


def join_blocks(name: str, parts: Sequence[tuple[float, float, pd.DataFrame]]) -> pd.DataFrame:
    """One table from the rows of blocks, each ``(core start s, core stop s, rows)``: a row belongs to the block whose core holds it."""
    kept = []
    for start_s, stop_s, rows in parts:
        if name == "spans":
            kept.append(clip_spans(rows, start_s, stop_s))
        elif len(rows):
            time = rows[time_column(rows)]
            kept.append(rows[(time >= start_s) & (time < stop_s)])
    filled = [rows for rows in kept if len(rows)]
    if not filled:
        return empty(name) if name in SCHEMAS else (parts[0][2].iloc[:0] if parts else pd.DataFrame())
    table = pd.concat(filled, ignore_index=True)
    if name == "spans":
        return _merge_spans(table)
    table = table.sort_values(time_column(table), kind="stable", ignore_index=True)
    return number_beats(table) if name == "beats" else table


def number_beats(beats: pd.DataFrame) -> pd.DataFrame:
    """Beats in time order, numbered from 0, with the interval from the beat before (NaN for the first)."""
    beats = beats.sort_values("r_time_s", kind="stable", ignore_index=True)
    gap = np.diff(beats["r_time_s"].to_numpy(float), prepend=-np.inf)
    beats = beats[gap >= _REFRACTORY_S].reset_index(drop=True)
    beats["beat"] = np.arange(len(beats))
    beats["rr_s"] = np.diff(beats["r_time_s"].to_numpy(float), prepend=np.nan)
    return beats


def clip_spans(spans: pd.DataFrame, start_s: float, stop_s: float) -> pd.DataFrame:
    """What of the spans lies in ``[start_s, stop_s)``."""
    onset = spans["onset_s"].to_numpy(float)
    end = np.minimum(onset + spans["duration_s"].to_numpy(float), stop_s)
    onset = np.maximum(onset, start_s)
    return spans.assign(onset_s=onset, duration_s=end - onset)[end > onset]


def _merge_spans(spans: pd.DataFrame) -> pd.DataFrame:
    """Spans of one kind on one channel that touch become one; the first detail stays."""
    merged = []
    for _, group in spans.groupby(["channel", "kind"], sort=False):
        group = group.sort_values("onset_s", kind="stable")
        onset = group["onset_s"].to_numpy(float)
        reach = np.maximum.accumulate(onset + group["duration_s"].to_numpy(float))
        starts = np.flatnonzero(np.r_[True, onset[1:] > reach[:-1] + 1e-6])
        row = group.iloc[starts].copy()
        row["duration_s"] = np.r_[reach[starts[1:] - 1], reach[-1]] - onset[starts]
        merged.append(row)
    return pd.concat(merged).sort_values(["onset_s", "channel", "kind"], kind="stable", ignore_index=True)


def rhythm_stretches(beats: pd.DataFrame) -> pd.DataFrame:
    """Stretches of one rhythm: ``onset_s, duration_s, rhythm``, from its first R to the first of the next; early beats end none."""
    named = beats[~beats["rhythm"].isin(["", "ectopic"])]
    if not len(named):
        return pd.DataFrame({"onset_s": pd.Series(dtype="f8"), "duration_s": pd.Series(dtype="f8"), "rhythm": pd.Series(dtype="object")})
    word, time = named["rhythm"].to_numpy(object), named["r_time_s"].to_numpy(float)
    first = np.flatnonzero(np.concatenate([[True], word[1:] != word[:-1]]))
    onset = time[first]
    end = np.concatenate([onset[1:], [float(beats["r_time_s"].iloc[-1])]])
    return pd.DataFrame({"onset_s": onset, "duration_s": end - onset, "rhythm": word[first]})


def overlaps(starts_s: NDArray, stops_s: NDArray, spans: pd.DataFrame) -> NDArray[np.int64]:
    """For each interval, the row number of the first span that overlaps it, -1 for none. Spans may overlap one another."""
    first = np.full(len(starts_s), -1, dtype=np.int64)
    onset = spans["onset_s"].to_numpy(float)
    end = onset + spans["duration_s"].to_numpy(float)
    for row in range(len(spans) - 1, -1, -1):
        first[(starts_s < end[row]) & (stops_s > onset[row])] = row
    return first


def beat_table(
    beats: pd.DataFrame,
    marks: pd.DataFrame,
    readings: pd.DataFrame | None,
    coupling: pd.DataFrame | None = None,
    rhythms: pd.DataFrame | None = None,
) -> pd.DataFrame:
    """The beat table of the contract from what is known: beats, the marks (the truth), the readings, P and rhythm of each beat.

    A wave without a mark is ``absent`` in a usable beat and ``unusable`` in another; its time and pressure are NaN. Of several marks
    of one wave in a beat the last before R counts for a, the surest for the others.
    """
    table = beats[["beat", "r_time_s", "r_sd_s", "rr_s", "source"]].copy()
    per_beat = (readings if readings is not None else empty("readings")).set_index("beat")
    table["usable"] = table["beat"].map(per_beat["usable"]).eq(True)
    table["reason"] = table["beat"].map(per_beat["reason"]).astype(object).where(table["beat"].isin(per_beat.index), "not measured")
    named = None if rhythms is None else rhythms.set_index("beat")["rhythm"]
    table["rhythm"] = "" if named is None else table["beat"].map(named).astype(object).where(table["beat"].isin(named.index), "")
    rows = pd.Series(np.arange(len(table)), index=table["beat"])
    for wave in WAVES:
        mine = marks[marks["mark"] == wave]
        order = mine.sort_values("time_s" if wave == "a" else "confidence", kind="stable")
        last = order.drop_duplicates("beat", keep="last")
        last = last[last["beat"].isin(rows.index)]
        at = rows.loc[last["beat"]].to_numpy()
        for column, source in ((f"{wave}_time_s", "time_s"), (f"{wave}_mmhg", "pressure_mmhg")):
            values = np.full(len(table), np.nan)
            values[at] = last[source]
            table[column] = values
        state = np.where(table["usable"], "absent", "unusable").astype(object)
        state[at] = last["state"]
        table[f"{wave}_state"] = state
    for column in per_beat.columns:
        if column not in ("usable", "reason", "r_time_s"):
            table[column] = table["beat"].map(per_beat[column])
    if "kind" in beats:
        table["kind"] = beats["kind"]
    if coupling is not None:
        of_beat = coupling.set_index("beat")
        table["p_state"] = table["beat"].map(of_beat["p"]).astype(object).where(table["beat"].isin(of_beat.index), "unknown")
        table["pr_s"] = table["beat"].map(of_beat["pr_s"])
        table["p_a_s"] = table["a_time_s"] - table["r_time_s"] + table["pr_s"]
        table["r_c_s"] = table["c_time_s"] - table["r_time_s"]
    for column in ("x_pre_mmhg", "mean_mmhg"):
        if column not in table:
            table[column] = np.nan
    return table[[*BEAT_COLUMNS, *(c for c in table.columns if c not in BEAT_COLUMNS)]]
