"""How late the pressure channel is: from P to a, from R to c, and what prior knowledge makes of them.

The trace alone cannot tell the delay of line and monitor from that of the heart: from P to a there is the atrium's own way from excitation
to pressure, and then the fluid, the transducer and the filters. What the heart takes is known from hearts measured at the heart, with a
spread; that spread, not the scatter of the beats, is what limits the answer. So the delay is given with its standard deviation and the
basis it rests on, and a delay that is known (measured, or by a flush) is the user's to give.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval import tables
from caval.errors import InputError
from caval.registry import stage

__all__ = ["delay"]

CELL_S = 300.0
_PRIOR_S = (0.030, 0.030)
"""Mean and SD of the delay of lines and monitors before anything is seen: 10 to 40 ms is usual (from memory), and lines can be worse."""
_P_TO_A_S = (0.090, 0.012)
"""At the heart: 80 to 100 ms (Mark 1998, from memory), and the few ms by which the onset of P is uncertain."""
_R_TO_C_S = (0.080, 0.020)
"""At the heart: 50 to 100 ms (Mark 1998, from memory)."""
_FEWEST = 10
_SLOW_S = 0.6
"""Interval above which the whole P wave can be seen; in faster hearts its onset is uncertain by twenty milliseconds."""


@stage(name="delay", gives=("delay",), margin_s=CELL_S)
def delay(beats: pd.DataFrame, atria: pd.DataFrame, marks: pd.DataFrame, *, line_delay_s: float | None = None) -> pd.DataFrame:
    """Intervals from the ECG to the venous trace, and the delay of line and monitor that they leave.

    Parameters
    ----------
    beats, atria, marks : DataFrame
        As the anchors, atrial and waves stages give them.
    line_delay_s : float, optional
        The delay where it is known, seconds; it then stands as given, with an SD of 0.

    Returns
    -------
    DataFrame
        A row every five minutes of the record: ``time_s`` (start of the five minutes), ``delay_s``, ``delay_sd_s``, ``p_a_s`` and
        ``r_c_s`` (medians, NaN where fewer than ten beats have them), ``p_a_n``, ``r_c_n``, ``basis``: ``P to a``, ``R to c``, both,
        ``prior`` (nothing was seen: the delay is what is usual) or ``given``.

    Raises
    ------
    InputError
        A given delay below 0 or above 0.5 s.
    """
    if line_delay_s is not None and not 0.0 <= line_delay_s <= 0.5:
        raise InputError(f"setting delay.line_delay_s = {line_delay_s!r}: seconds from 0 to 0.5 are needed")
    if not len(beats):
        return tables.empty("delay")
    r = beats.set_index("beat")["r_time_s"]
    sure = marks[marks["state"] != "fused"]
    p_a, r_c = _after_p(beats, atria, sure), _after_r(r, sure)
    first, last = (int(np.floor(t / CELL_S)) for t in (r.iloc[0], r.iloc[-1]))
    rows = [_cell(k * CELL_S, p_a, r_c, line_delay_s) for k in range(first, last + 1)]
    return pd.DataFrame(rows, columns=list(tables.SCHEMAS["delay"]))


def _after_p(beats: pd.DataFrame, atria: pd.DataFrame, marks: pd.DataFrame) -> NDArray[np.float64]:
    """Times of coupled P waves and from each to its a, seconds, shape (n, 2)."""
    interval = beats.set_index("beat")["rr_s"]
    p = atria[atria["coupled"] & (atria["beat"].map(interval) > _SLOW_S)]
    a = marks[marks["mark"] == "a"].drop_duplicates("beat", keep="last").set_index("beat")["time_s"]
    gap = p["beat"].map(a).to_numpy(float) - p["time_s"].to_numpy(float)
    keep = (gap > 0.05) & (gap < 0.35)
    return np.column_stack([p["time_s"].to_numpy(float), gap])[keep]


def _after_r(r: pd.Series, marks: pd.DataFrame) -> NDArray[np.float64]:
    """Times of R and from each to its c, seconds, shape (n, 2)."""
    c = marks[marks["mark"] == "c"]
    at = c["beat"].map(r).to_numpy(float)
    gap = c["time_s"].to_numpy(float) - at
    return np.column_stack([at, gap])[np.isfinite(gap)]


def _cell(start_s: float, p_a: NDArray[np.float64], r_c: NDArray[np.float64], given_s: float | None) -> tuple[object, ...]:
    """One row: the posterior of a normal prior and normal likelihoods, the spread of hearts being that of each likelihood."""
    found = []
    for pairs in (p_a, r_c):
        gaps = pairs[(pairs[:, 0] >= start_s) & (pairs[:, 0] < start_s + CELL_S), 1]
        found.append((float(np.median(gaps)), len(gaps)) if len(gaps) >= _FEWEST else (np.nan, len(gaps)))
    means, weights, basis = [_PRIOR_S[0]], [_PRIOR_S[1] ** -2], []
    for (gap, _), (usual, spread), word in zip(found, (_P_TO_A_S, _R_TO_C_S), ("P to a", "R to c"), strict=True):
        if np.isfinite(gap):
            means.append(gap - usual)
            weights.append(spread**-2)
            basis.append(word)
    value, sd = float(np.average(means, weights=weights)), float(np.sum(weights) ** -0.5)
    if given_s is not None:
        value, sd, basis = given_s, 0.0, ["given"]
    (p_a_s, p_a_n), (r_c_s, r_c_n) = found
    return start_s, max(value, 0.0), sd, p_a_s, p_a_n, r_c_s, r_c_n, ", ".join(basis) or "prior"
