"""What the host's users pass, made into arrays: signals, sampling rate, method, R peaks."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval.errors import InputError

__all__ = ["METHODS", "as_rate", "as_samples", "as_signal", "check_method"]

METHODS = ("caval",)
"""Methods by name; more may be added, none renamed."""


def as_signal(values: Any, function: str, *, columns: Sequence[str] = (), length: int | None = None) -> NDArray[np.float64]:
    """A float64 vector from a list, array, Series, or a DataFrame that has one of `columns`.

    Raises
    ------
    InputError
        More than one dimension, no values, another length than `length`, or a DataFrame without the column.
    """
    if isinstance(values, pd.DataFrame):
        found = next((c for c in columns if c in values.columns), None)
        if found is None:
            have = ", ".join(map(str, values.columns))
            raise InputError(f"caval error: {function}(): the DataFrame has none of the columns {', '.join(columns)} (it has: {have})")
        values = values[found]
    try:
        signal = np.asarray(values, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise InputError(f"caval error: {function}(): the signal must be a list, array or Series of numbers ({error})") from None
    if signal.ndim == 2 and 1 in signal.shape:
        signal = signal.ravel()
    if signal.ndim != 1 or not len(signal):
        raise InputError(f"caval error: {function}(): the signal has shape {signal.shape}; a vector with at least one value is needed")
    if length is not None and len(signal) != length:
        raise InputError(
            f"caval error: {function}(): signals of {len(signal)} and {length} samples; all must share one clock. "
            "Resample one with nk.signal_resample(), or use caval.mark(), which takes every channel at its own rate"
        )
    return signal


def as_rate(sampling_rate: Any, function: str) -> float:
    """The sampling rate in Hz.

    Raises
    ------
    InputError
        Not a number above 0.
    """
    try:
        rate = float(sampling_rate)
    except (TypeError, ValueError):
        rate = math.nan
    if not (math.isfinite(rate) and rate > 0):
        raise InputError(f"caval error: {function}(): sampling_rate={sampling_rate!r}; samples per second, above 0")
    return rate


def check_method(method: str, function: str) -> str:
    """The method's name in lower case.

    Raises
    ------
    InputError
        A method that is not one of `METHODS`.
    """
    name = str(method).lower()
    if name not in METHODS:
        raise InputError(f"caval error: {function}(): 'method' should be one of {', '.join(map(repr, METHODS))}, not {method!r}")
    return name


def as_samples(rpeaks: Any, length: int, function: str) -> NDArray[np.float64]:
    """Sample indices (0-based, ascending, NaN dropped) of R peaks in any form the host gives them.

    Indices as list, array or Series; a dict or a DataFrame with ``ECG_R_Peaks`` (a DataFrame, and a Series of `length` zeros and
    ones, hold markers); the ``(signals, info)`` of ``ecg_peaks()``.

    Raises
    ------
    InputError
        No such key, or an index outside the signal.
    """
    key = "ECG_R_Peaks"
    if isinstance(rpeaks, tuple) and len(rpeaks) == 2 and isinstance(rpeaks[1], dict):
        rpeaks = rpeaks[1]
    if isinstance(rpeaks, (dict, pd.DataFrame)):
        if key not in rpeaks:
            raise InputError(f"caval error: {function}(): 'rpeaks' has no {key!r}; it has: {', '.join(map(str, rpeaks))}")
        markers = isinstance(rpeaks, pd.DataFrame)
        rpeaks = rpeaks[key]
    else:
        markers = isinstance(rpeaks, pd.Series) and len(rpeaks) == length and bool(rpeaks.isin([0, 1]).all())
    samples = np.asarray(rpeaks, dtype=np.float64).ravel()
    if markers:
        samples = np.flatnonzero(samples == 1).astype(np.float64)
    samples = np.unique(samples[np.isfinite(samples)])
    if len(samples) and (samples[0] < 0 or samples[-1] > length - 1):
        wrong = samples[0] if samples[0] < 0 else samples[-1]
        raise InputError(
            f"caval error: {function}(): R peak at sample {wrong:g}, but the signal has samples 0 to {length - 1}. "
            "'rpeaks' are sample indices at the signal's own sampling_rate"
        )
    return samples
