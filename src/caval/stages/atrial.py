"""P waves on the ECG, proven against what noise would give.

A delineator that is asked for the P of a beat finds one, also in fibrillation. Here a P has to be proven first: the median of many
R-aligned beats must show, before R and after the T of the beat before, a bump that stands far above what the beats' own spread leaves in
such a median. Where it does, each beat is asked for its own P, which must look like the median's. Where it does not, the QRS–T picture is
taken away and P waves are sought that march through at a pace of their own; they count when they stand alone, which the waves of
fibrillation do not.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import ndimage

from caval import tables
from caval.recording import Signal
from caval.registry import stage
from caval.stages._p_coupled import LOCAL, PPicture, View, calm_level, each_beat, roughness, without_p
from caval.stages._p_lead import FEWEST, thin_lead
from caval.stages._p_marching import marching_p
from caval.stages._picture import KNOT_S, NEIGHBOURS_S
from caval.stages._signal import uneven

__all__ = ["atrial"]

Floats = NDArray[np.float64]


@stage(name="atrial", gives=("atria", "coupling"), margin_s=120.0)
def atrial(beats: pd.DataFrame, ecg: Signal | None = None) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Find P waves, and say of each beat whether it has one.

    Parameters
    ----------
    beats : DataFrame
        As the anchors stage gives them.
    ecg : Signal, optional
        One lead, any unit, either polarity. Without one, nothing is known of the atria.

    Returns
    -------
    atria : DataFrame
        A row a P: ``time_s`` (onset, s), ``beat`` (number of the R that follows), ``coupled``, ``pr_s`` (onset to R, NaN when not coupled),
        ``confidence``. P waves that R or T hide but the pace of the atria places have a confidence of 0.5.
    coupling : DataFrame
        A row a beat: ``beat, r_time_s, p, pr_s, confidence``. `p` is ``coupled``; ``apart`` where P waves march at a pace of their own;
        ``absent`` where the lead is quiet enough to show a P and shows none; ``unknown`` where it is not.
    """
    lead = None if ecg is None else thin_lead(ecg)
    r = beats["r_time_s"].to_numpy(float)
    normal = (beats["kind"] == "normal").to_numpy() if "kind" in beats else np.ones(len(r), dtype=bool)
    if len(r) < FEWEST or lead is None:
        return tables.empty("atria"), _coupling(beats, np.full(len(r), "unknown", dtype=object), np.full(len(r), np.nan), np.zeros(len(r)))
    state = np.full(len(r), "unknown", dtype=object)
    onset, sure = np.full(len(r), np.nan), np.zeros(len(r))
    marching: list[tuple[float, float]] = []
    ragged = uneven(r, LOCAL)
    for k in range(int(np.floor(r[0] / KNOT_S)), int(np.ceil(r[-1] / KNOT_S)) + 1):
        here = np.flatnonzero((r >= (k - 0.5) * KNOT_S) & (r < (k + 0.5) * KNOT_S))
        near = np.flatnonzero(np.abs(r - k * KNOT_S) <= NEIGHBOURS_S)
        if not len(here) or len(near) < FEWEST:
            continue
        alike = _alike(normal, near)
        view = View.of(lead, r[alike], _interval(r, alike))
        if view is None:
            continue  # T runs into the next QRS complex: a P could not be seen
        cell = ((k - 0.5) * KNOT_S, (k + 0.5) * KNOT_S)
        rows = view.rows(r[alike])
        calm = calm_level(rows)
        quiet = rows[roughness(rows) <= calm]
        picture = PPicture.of(view, quiet)
        march = marching_p(lead, r, near, cell) if picture is None or picture.doubtful else None
        if march is not None:
            marching += march
            state[here], sure[here] = "apart", 0.9
        elif picture is not None:
            state[here], onset[here], sure[here] = each_beat(view, picture, r[here], ragged[here], r[alike], rows, calm)
        else:
            state[here], sure[here] = np.where(roughness(view.rows(r[here])) <= calm, without_p(view, quiet), "unknown"), 0.8
    onset, sure = np.round(onset, 6), np.round(sure, 6)  # the ends of a filtered block reach far, but not that high
    atria = _atria(beats, r, onset, sure, np.round(np.array(marching).reshape(-1, 2), 6))
    return atria, _coupling(beats, state, r - onset, sure)


def _alike(normal: NDArray[np.bool_], near: NDArray[np.int64]) -> NDArray[np.int64]:
    """Of the beats near, those of which the picture is made: not early ones, which have no P or one at another place, and, while enough are
    left, none that comes after an early one, on whose T its P may lie."""
    usual = near[normal[near]]
    calm = usual[normal[np.maximum(usual - 1, 0)]]
    if len(usual) < FEWEST:
        return near
    return calm if len(calm) >= max(FEWEST, len(usual) / 4) else usual


def _interval(r: Floats, rows: NDArray[np.int64]) -> float:
    """The usual interval before some of the beats, s."""
    rows = rows[rows > 0]
    return float(np.median(r[rows] - r[rows - 1]))


def _atria(beats: pd.DataFrame, r: Floats, onset: Floats, sure: Floats, marching: Floats) -> pd.DataFrame:
    """The table of P waves: coupled ones, marching ones, and those that an early beat hides but the pace places."""
    has = np.flatnonzero(np.isfinite(onset))
    lone, lone_sure = marching[:, 0], marching[:, 1]
    hidden = _hidden(onset, has)
    apart = np.sort(np.concatenate([lone, hidden]))
    apart_sure = np.concatenate([lone_sure, np.full(len(hidden), 0.5)])[np.argsort(np.concatenate([lone, hidden]), kind="stable")]
    number = beats["beat"].to_numpy(np.int64)
    follows = np.searchsorted(r, apart)
    known = follows < len(r)
    apart, apart_sure, follows = apart[known], apart_sure[known], follows[known]
    coupled = {"time_s": onset[has], "beat": number[has], "coupled": True, "pr_s": (r - onset)[has], "confidence": sure[has]}
    others = {"time_s": apart, "beat": number[follows], "coupled": False, "pr_s": np.nan, "confidence": apart_sure}
    rows = pd.concat([pd.DataFrame(coupled), pd.DataFrame(others)], ignore_index=True)
    return rows.astype({"coupled": bool}).sort_values("time_s", kind="stable", ignore_index=True)


def _hidden(onset: Floats, has: NDArray[np.int64]) -> Floats:
    """P waves that the pace places: where one beat comes between two beats with a P and has none of its own, an early beat hides it."""
    if len(has) < FEWEST:
        return np.empty(0)
    p = onset[has]
    gaps = np.diff(p)
    usual = ndimage.median_filter(gaps, size=min(31, len(gaps) | 1), mode="nearest")
    skipped = (np.diff(has) == 2) & (np.abs(gaps / usual - 2.0) < 0.3)
    rows = np.flatnonzero(skipped)
    return p[rows] + gaps[rows] / 2


def _coupling(beats: pd.DataFrame, state: NDArray, pr_s: Floats, sure: Floats) -> pd.DataFrame:
    of = {name: beats[name].to_numpy() for name in ("beat", "r_time_s")}
    return pd.DataFrame({**of, "p": state, "pr_s": pr_s, "confidence": sure})
