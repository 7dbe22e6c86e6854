"""Cleaning of the venous pressure in NeuroKit2's grammar."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import signal as scipy_signal

from caval_neurokit._inputs import as_rate, as_signal, check_method

__all__ = ["cvp_clean"]

_CUTOFF_HZ = 20.0
# The c wave, the quickest of the venous waves, lasts some 80 ms: its power lies below 10 Hz.


def cvp_clean(cvp_signal: Any, sampling_rate: float = 1000, method: str = "caval") -> NDArray[np.float64]:
    """Clean a central venous pressure: take off what is quicker than its waves, keep its level.

    ``caval`` (default): a second-order Butterworth low-pass at 20 Hz, run forwards and backwards, so no wave moves in time. The
    pressure level stays, in the unit of the input; there is no high-pass and no detrending, because the level is the measurement.

    Parameters
    ----------
    cvp_signal : list, array or Series, shape (n,)
        Venous pressure (mmHg); NaN where nothing was recorded. A DataFrame with ``CVP_Raw`` or ``CVP`` will do.
    sampling_rate : float
        Samples per second. At 40 Hz and below there is nothing to take off, and the signal comes back as it is.
    method : {"caval"}

    Returns
    -------
    float64 array, shape (n,)
        NaN stays NaN; gaps are bridged by straight lines for the filter only.

    Raises
    ------
    InputError
        Not a vector, a sampling rate that is not above 0, an unknown method.

    See Also
    --------
    cvp_peaks, cvp_process, cvp_plot

    Examples
    --------
    >>> import caval
    >>> cvp = caval.demo_recording(minutes=0.25).read("CVP")
    >>> cleaned = cvp_clean(cvp, sampling_rate=125)
    >>> bool(abs(cleaned.mean() - cvp.mean()) < 0.05)
    True
    """
    raw = as_signal(cvp_signal, "cvp_clean", columns=("CVP_Raw", "CVP"))
    rate = as_rate(sampling_rate, "cvp_clean")
    check_method(method, "cvp_clean")
    missing = ~np.isfinite(raw)
    if rate <= 2 * _CUTOFF_HZ or len(raw) - missing.sum() < 4:
        return raw.copy()
    known = np.flatnonzero(~missing)
    bridged = np.interp(np.arange(len(raw)), known, raw[known])
    sos = scipy_signal.butter(2, _CUTOFF_HZ, output="sos", fs=rate)
    pad = min(len(raw) - 1, round(rate / _CUTOFF_HZ) * 3)
    cleaned = scipy_signal.sosfiltfilt(sos, bridged, padlen=pad)
    cleaned[missing] = np.nan
    return cleaned
