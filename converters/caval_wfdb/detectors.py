"""A detector of the wfdb package as a detector of caval."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from caval.recording import Signal
from caval.registry import detector

__all__ = ["xqrs"]

_SLOWEST_HZ = 50.0
"""The detector filters up to 20 Hz and needs some room above twice that."""
_SHORTEST_S = 10.0
"""The detector learns from its first seconds; below this it has no default to fall back on that finds anything."""


@detector(name="xqrs", role="ecg")
def xqrs(ecg: Signal) -> NDArray[np.float64]:
    """QRS times in seconds by wfdb's XQRS; none on a lead that is flat, missing, slower than 50 Hz or shorter than 10 s.

    About a minute for each hour.
    """
    known = np.isfinite(ecg.values)
    if ecg.sampling_rate < _SLOWEST_HZ or len(ecg) < _SHORTEST_S * ecg.sampling_rate or known.sum() < 0.5 * len(ecg):
        return np.empty(0)
    values = np.interp(np.arange(len(ecg)), np.flatnonzero(known), ecg.values[known])
    if np.ptp(values) < 1e-9 * max(1.0, float(np.abs(values).max())):
        return np.empty(0)
    from wfdb.processing import XQRS

    found = XQRS(sig=values, fs=ecg.sampling_rate)
    found.detect(verbose=False)
    samples = np.asarray(found.qrs_inds, dtype=np.int64)
    return ecg.start_s + samples[known[samples]] / ecg.sampling_rate if len(samples) else np.empty(0)
