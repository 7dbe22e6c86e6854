"""Waves of the venous pressure in NeuroKit2's grammar."""

from __future__ import annotations

from typing import Any

import pandas as pd

from caval_neurokit._inputs import as_rate, as_samples, as_signal, check_method
from caval_neurokit._marked import info_of, markers_of, run

__all__ = ["cvp_peaks"]


def cvp_peaks(
    cvp_cleaned: Any, rpeaks: Any = None, sampling_rate: float = 1000, method: str = "caval"
) -> tuple[pd.DataFrame, dict[str, Any]]:
    """Find the a, c, x, v and y (and z, h) of every beat.

    Parameters
    ----------
    cvp_cleaned : list, array or Series, shape (n,)
        Venous pressure in mmHg, from `cvp_clean`; NaN where nothing was recorded.
    rpeaks : array, dict, DataFrame or tuple, optional
        R peaks as sample indices (0-based, at `sampling_rate`), or what ``ecg_peaks()`` gives. Without them the pipeline
        is asked for beats from the venous trace alone; where it finds none there are no marks, and a warning says so. `cvp_process`
        takes the ECG.
    sampling_rate : float
        Samples per second of `cvp_cleaned`.
    method : {"caval"}

    Returns
    -------
    signals : DataFrame, n rows
        Markers, int64, 1 at the mark and 0 elsewhere: ``CVP_R_Peaks``, ``CVP_A_Peaks``, ``CVP_Z_Troughs``, ``CVP_C_Peaks``,
        ``CVP_X_Troughs``, ``CVP_V_Peaks``, ``CVP_Y_Troughs``, ``CVP_H_Peaks``. Every mark is here, also a second a wave of one beat.
    info : dict
        The same keys with sample indices (0-based), ONE ENTRY A BEAT in every array: float64, NaN where the beat has no such mark;
        ``CVP_R_Peaks`` is int64. ``CVP_R_Source`` says where each R came from (``given``, ``ecg``, ``cvp`` …). And
        ``sampling_rate`` and ``method_peaks``. Drop NaN before ``nk.signal_formatpeaks()``.

    Raises
    ------
    InputError
        Not a vector, R peaks outside the signal, an unknown method.

    Warns
    -----
    UserWarning
        Nothing to mark; the text says why.

    See Also
    --------
    cvp_clean, cvp_process, cvp_plot

    Examples
    --------
    >>> from caval.model.sketch import sketch
    >>> from caval_neurokit import cvp_clean
    >>> drawn = sketch(minutes=0.5)
    >>> cleaned = cvp_clean(drawn.recording.read("CVP"), sampling_rate=125)
    >>> signals, info = cvp_peaks(cleaned, rpeaks=drawn.r_times_s * 125, sampling_rate=125)
    >>> len(info["CVP_A_Peaks"]) == len(info["CVP_X_Troughs"]) == len(drawn.r_times_s)
    True
    """
    cleaned = as_signal(cvp_cleaned, "cvp_peaks", columns=("CVP_Clean", "CVP_Raw", "CVP"))
    rate = as_rate(sampling_rate, "cvp_peaks")
    name = check_method(method, "cvp_peaks")
    r_samples = None if rpeaks is None else as_samples(rpeaks, len(cleaned), "cvp_peaks")
    result = run(cleaned, rate, "cvp_peaks", r_samples=r_samples)
    info = info_of(result, rate, len(cleaned), name)
    return markers_of(result, rate, len(cleaned)), info | {"sampling_rate": sampling_rate}
