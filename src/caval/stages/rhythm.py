"""The rhythm of every beat, from its intervals, its P waves and its a waves together.

Intervals alone cannot tell fibrillation from frequent early beats, nor P waves alone a lead that shows none. So each beat looks at the
beats around it: how irregular they are, how many have a P of their own, how many have an a at its usual place, and how fast and how evenly
they come.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import ndimage

from caval import tables
from caval.recording import Signal
from caval.registry import stage
from caval.stages._signal import UNEVEN, cut
from caval.stages.detect import clean_ecg
from caval.vocabulary import RHYTHMS

__all__ = ["rhythm"]

Floats = NDArray[np.float64]

_AROUND = 10
"""Beats either way that a beat is judged by."""
_AROUND_UNEVEN = 15
"""The same for the evenness of the intervals, which takes more of them."""
_MOST = 7
"""Beats either way that settle the rhythm of a beat by majority."""
_BY_PRESSURE = 0.7
"""Share of beats with an a before R from which the pressure tells that the atria lead, though the ECG shows no P."""
_LATEST_A_S = 0.09
"""After R; an a of atria that fire with the ventricles stands a tenth of a second after R, and later through a line."""
_LONGEST_S = 4.0
"""An interval longer than this is a pause of the recording, not of the heart."""
_SPIKE = 0.05
"""Height of a pacing spike over that of the QRS complex, at the least."""


@stage(name="rhythm", gives=("rhythms",), margin_s=120.0)
def rhythm(
    beats: pd.DataFrame,
    coupling: pd.DataFrame,
    marks: pd.DataFrame,
    ecg: Signal | None = None,
    *,
    irregular: float = UNEVEN,
    early: float = 0.80,
    fast_per_min: float = 100.0,
) -> pd.DataFrame:
    """Name the rhythm of every beat (`caval.vocabulary.RHYTHMS`).

    Parameters
    ----------
    beats, coupling, marks : DataFrame
        As the anchors, atrial and waves stages give them.
    ecg : Signal, optional
        For pacing spikes.
    irregular : float
        Median difference of successive intervals over the median interval, from which intervals are irregular; see `UNEVEN`.
    early : float
        Share of the usual interval below which a beat is early (common practice: a fifth and more).
    fast_per_min : float
        Rate from which a regular rhythm is a tachycardia (adults, common practice).

    Returns
    -------
    DataFrame
        ``beat, r_time_s, rhythm``. Early beats of a rhythm with P are ``ectopic``.
    """
    r = beats["r_time_s"].to_numpy(float)
    if not len(r):
        return tables.empty("rhythms")
    interval = np.diff(r, prepend=np.nan)
    interval[interval > _LONGEST_S] = np.nan
    usual = _median((interval + np.append(interval[1:], np.nan)) / 2, _AROUND)  # of an early beat and its pause, half of both
    uneven = _median(np.abs(np.diff(interval, prepend=np.nan)), _AROUND_UNEVEN) / usual
    state = beats["beat"].map(coupling.set_index("beat")["p"]).astype(object)
    state = state.where(state.notna(), "unknown").to_numpy(object)
    share = {key: _share(state == key, state != "unknown") for key in ("coupled", "apart", "absent")}
    share["a"] = _share(*_with_a(beats, marks))
    spiked = _share(_spikes(ecg, r), np.ones(len(r), dtype=bool)) > 0.5
    fast = 60.0 / usual > fast_per_min

    names = list(RHYTHMS)
    told = np.full(len(r), names.index("unknown"))
    known = np.isfinite(uneven)
    is_irregular = uneven > irregular
    conducted = (share["coupled"] > 0.5) | (share["a"] > _BY_PRESSURE) & ~(share["apart"] > 0.5)
    no_p = ~conducted & ((share["absent"] > 0.5) | (np.isnan(share["coupled"]) & (share["a"] < 1 - _BY_PRESSURE)))
    told[known & conducted] = names.index("sinus")
    told[known & conducted & ~is_irregular & fast] = names.index("tachycardia")
    told[known & no_p & is_irregular] = names.index("fibrillation")
    told[known & no_p & ~is_irregular & ~fast] = names.index("junctional")
    told[known & (share["apart"] > 0.5)] = names.index("dissociation")
    told[known & ~(share["coupled"] > 0.5) & spiked] = names.index("paced")
    told = _majority(told, len(names))

    with_p = np.isin(told, [names.index("sinus"), names.index("tachycardia")])
    is_early = interval < early * usual
    if "kind" in beats:
        is_early |= beats["kind"].astype(str).str.startswith("premature").to_numpy()
    told[with_p & is_early] = names.index("ectopic")
    words = np.array(names, dtype=object)[told]
    return pd.DataFrame({"beat": beats["beat"].to_numpy(np.int64), "r_time_s": r, "rhythm": words})


def _with_a(beats: pd.DataFrame, marks: pd.DataFrame) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Beats whose a stands before the ventricle can have shut the valve, and beats of which the trace can be read."""
    last = marks[(marks["mark"] == "a") & (marks["state"] != "fused")].drop_duplicates("beat", keep="last").set_index("beat")["time_s"]
    after = beats["beat"].map(last).to_numpy(float) - beats["r_time_s"].to_numpy(float)
    return after < _LATEST_A_S, beats["beat"].isin(marks["beat"]).to_numpy()


def _windows(values: NDArray, reach: int) -> NDArray:
    """Values of the beats around each beat, NaN beyond the ends, shape (n, 2 reach + 1)."""
    padded = np.concatenate([np.full(reach, np.nan), values.astype(float), np.full(reach, np.nan)])
    return np.lib.stride_tricks.sliding_window_view(padded, 2 * reach + 1)


def _median(values: Floats, reach: int) -> Floats:
    """Running median that passes over what is missing; NaN where fewer than five are known."""
    windows = np.sort(_windows(values, reach), axis=1)  # NaN go to the end
    count = np.isfinite(windows).sum(axis=1)
    rows = np.arange(len(values))
    low, high = (np.maximum(count - 1, 0)) // 2, np.minimum(np.maximum(count, 0) // 2, 2 * reach)
    middle = (windows[rows, low] + windows[rows, high]) / 2
    return np.where(count >= 5, middle, np.nan)


def _share(which: NDArray[np.bool_], of: NDArray[np.bool_]) -> Floats:
    """Share of the beats around that are `which`, among those that are `of`; NaN where fewer than five, or a quarter, are."""
    hits, count = (np.nansum(_windows(m, _AROUND), axis=1) for m in (which & of, of))
    total = np.isfinite(_windows(np.ones(len(of)), _AROUND)).sum(axis=1)
    enough = (count >= 5) & (count >= total / 4)
    return np.where(enough, hits / np.maximum(count, 1), np.nan)


def _majority(told: NDArray[np.int64], kinds: int) -> NDArray[np.int64]:
    """The commonest of the beats around; the beat's own where two are equally common."""
    votes = np.stack([ndimage.uniform_filter1d((told == k).astype(float), 2 * _MOST + 1, mode="nearest") for k in range(kinds)])
    votes[told, np.arange(len(told))] += 1e-6
    return votes.argmax(axis=0)


def _spikes(ecg: Signal | None, r: Floats) -> NDArray[np.bool_]:
    """Beats with a pacing spike before R: what the detectors take out as too brief for a heart, tall beside the QRS complex."""
    if ecg is None or len(ecg) < ecg.sampling_rate:
        return np.zeros(len(r), dtype=bool)
    cleaned, missing = clean_ecg(ecg)
    spikes = np.where(missing, 0.0, np.abs(np.nan_to_num(ecg.values) - cleaned.values))
    before, length = round(0.25 * ecg.sampling_rate), round(0.35 * ecg.sampling_rate)
    first = np.rint(ecg.position(r)).astype(int) - before
    height = np.ptp(cut(cleaned.values, first, length), axis=1)
    return np.asarray(cut(spikes, first, round(0.23 * ecg.sampling_rate)).max(axis=1) > np.maximum(_SPIKE * height, 1e-12))
