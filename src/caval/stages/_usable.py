"""Which beats can be read on the venous trace."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval.recording import Signal
from caval.tables import overlaps
from caval.vocabulary import SPANS

__all__ = ["BEFORE_R_S", "beat_stops", "usable_beats"]

BEFORE_R_S = 0.25
"""A beat begins this long before its R: its a wave belongs to it."""
_LONGEST_S = 1.5


def beat_stops(r_time_s: NDArray[np.float64]) -> NDArray[np.float64]:
    """Where each beat ends, s: before the a wave of the next, 1.5 s after R at the latest."""
    following = np.append(r_time_s[1:], np.inf)
    return np.minimum(following - BEFORE_R_S, r_time_s + _LONGEST_S).clip(min=r_time_s + 0.1)


def usable_beats(cvp: Signal, beats: pd.DataFrame, spans: pd.DataFrame) -> tuple[NDArray[np.bool_], NDArray[np.object_]]:
    """For each beat whether its venous trace can be read, and the reason when not (``""`` when it can)."""
    r = beats["r_time_s"].to_numpy(float)
    starts, stops = r - BEFORE_R_S, beat_stops(r)
    bad = spans[(spans["channel"] == cvp.label) & ~spans["kind"].isin([k for k, term in SPANS.items() if not term.unusable])]
    row = overlaps(starts, np.minimum(stops, r + 0.8), bad)
    reason = np.append(bad["kind"].to_numpy(object), "")[row]
    outside = (r < cvp.start_s) | (r + 0.3 > cvp.stop_s)
    reason = np.where((row < 0) & outside, "outside the trace", reason)
    return reason == "", reason.astype(object)
