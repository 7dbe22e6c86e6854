"""The whole way from a venous pressure to its waves, in NeuroKit2's grammar."""

from __future__ import annotations

from typing import Any

import pandas as pd

from caval_neurokit._inputs import as_rate, as_samples, as_signal, check_method
from caval_neurokit._marked import info_of, markers_of, phase_of, quality_of, run
from caval_neurokit.cvp_clean import cvp_clean

__all__ = ["cvp_process"]


def cvp_process(
    cvp_signal: Any,
    ecg_signal: Any = None,
    rpeaks: Any = None,
    sampling_rate: float = 1000,
    method: str = "caval",
    *,
    abp_signal: Any = None,
) -> tuple[pd.DataFrame, dict[str, Any]]:
    """Clean a central venous pressure, judge it, and find the waves of every beat.

    Parameters
    ----------
    cvp_signal : list, array or Series, shape (n,)
        Venous pressure in mmHg; NaN where nothing was recorded.
    ecg_signal : list, array or Series, shape (n,), optional
        ECG in any unit on the same clock; R peaks are found in it, and in `abp_signal` where the ECG is disturbed.
    rpeaks : array, dict, DataFrame or tuple, optional
        R peaks found already, as in `cvp_peaks`; they are taken as they are, and `ecg_signal` is then not searched.
    sampling_rate : float
        Samples per second of all signals.
    method : {"caval"}
    abp_signal : list, array or Series, shape (n,), optional
        Arterial pressure in mmHg on the same clock.

    Returns
    -------
    signals : DataFrame, n rows
        ``CVP_Raw``, ``CVP_Clean`` (mmHg); ``CVP_Quality``, 0 to 1: mean confidence of the beat's marks, 0 where the trace cannot be
        read; ``CVP_Phase_Systole``: 1 from R to the v peak, 0 from there to the next R, NaN in beats without v and before and after
        the first and last of these points; ``CVP_Phase_Completion_Systole``: how much of that phase is over, 0 to 1; and the marker
        columns of `cvp_peaks`.
    info : dict
        As in `cvp_peaks`: sample indices (0-based), one entry a beat, NaN where the beat has no such mark.

    Raises
    ------
    InputError
        Not a vector, signals of unlike lengths, R peaks outside the signal, an unknown method.

    Warns
    -----
    UserWarning
        Nothing to mark; the text says why.

    See Also
    --------
    cvp_clean, cvp_peaks, cvp_plot

    Examples
    --------
    >>> from caval.model.sketch import sketch
    >>> demo = sketch(minutes=0.5, pressure_rate=250, ecg_rate=250).recording
    >>> signals, info = cvp_process(demo.read("CVP"), ecg_signal=demo.read("ECG II"), sampling_rate=250)
    >>> list(signals.columns[:3]), len(signals)
    (['CVP_Raw', 'CVP_Clean', 'CVP_Quality'], 7500)
    """
    raw = as_signal(cvp_signal, "cvp_process", columns=("CVP_Raw", "CVP"))
    n = len(raw)
    rate = as_rate(sampling_rate, "cvp_process")
    name = check_method(method, "cvp_process")
    ecg = None if ecg_signal is None else as_signal(ecg_signal, "cvp_process", columns=("ECG_Raw", "ECG_Clean", "ECG"), length=n)
    abp = None if abp_signal is None else as_signal(abp_signal, "cvp_process", columns=("ABP_Raw", "ABP"), length=n)
    r_samples = None if rpeaks is None else as_samples(rpeaks, n, "cvp_process")

    cleaned = cvp_clean(raw, sampling_rate=rate, method=name)
    # The raw trace is judged: a flat or clipped stretch no longer looks like one when it has been filtered.
    result = run(raw, rate, "cvp_process", r_samples=r_samples, ecg=ecg, abp=abp)
    info = info_of(result, rate, n, name)
    quality = quality_of(result, rate, n)

    signals = pd.DataFrame({"CVP_Raw": raw, "CVP_Clean": cleaned, "CVP_Quality": quality})
    signals = pd.concat([signals, phase_of(info, n), markers_of(result, rate, n)], axis=1)
    return signals, info | {"method_cleaning": name, "sampling_rate": sampling_rate}
