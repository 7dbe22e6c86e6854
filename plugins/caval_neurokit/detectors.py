"""NeuroKit2's R-peak detectors as detectors of caval: a Signal in, R times in seconds out.

What the host does not handle is handled here: gaps are bridged for its filters and give no beats, a lead that does not move gives no
beats, and a stretch too short to judge gives none. Times are those of the host's detector on the host's own cleaned ECG, except for
`rodrigues2021`, whose event is the steepest slope: it is moved to the tip of the QRS complex.
"""

from __future__ import annotations

import threading
import warnings
from typing import Any

import numpy as np
from numpy.typing import NDArray

from caval.recording import Signal
from caval.registry import detector

__all__ = ["engzeemod2012", "neurokit", "rodrigues2021"]

_SHORTEST_S = 3.0
"""Below this the host's high-pass (0.5 Hz, both ways) sees less than two of its own periods."""
_LOWEST_RATE_HZ = 40.0
"""A QRS complex lasts about 80 ms: three samples of it are the least."""
_STILL_S = 0.1
"""A lead that keeps one value this long on either side of an event shows no QRS complex there."""
_TIP_S = 0.06
"""Half a QRS complex, in which `rodrigues2021` looks for the tip."""

_HOST = threading.Lock()
# `warnings.catch_warnings` is not thread-safe, and the pipeline may run blocks in threads.


@detector(name="neurokit", role="ecg")
def neurokit(signal: Signal) -> NDArray[np.float64]:
    """R times by the gradient detector that is NeuroKit2's own default (Makowski et al., Behav Res 2021;53:1689).

    Parameters
    ----------
    signal : Signal
        ECG in any unit, shape (n,); NaN where nothing was recorded.

    Returns
    -------
    float64 array, shape (k,)
        Seconds of the record, ascending; empty for a lead that is flat, missing or shorter than 3 s.

    Examples
    --------
    >>> import caval
    >>> ecg = caval.demo_recording(minutes=0.25).channel("ECG II").signal()
    >>> len(neurokit(ecg))
    18
    """
    return _run(signal, clean="neurokit", find="neurokit")


@detector(name="rodrigues2021", role="ecg")
def rodrigues2021(signal: Signal) -> NDArray[np.float64]:
    """R times by the double-difference detector of Rodrigues et al. (2021) in NeuroKit2, moved to the tip of the complex.

    Parameters and return as in `neurokit`.
    """
    return _run(signal, clean="neurokit", find="rodrigues2021", tip=True)


@detector(name="engzeemod2012", role="ecg")
def engzeemod2012(signal: Signal) -> NDArray[np.float64]:
    """R times by the modified Engelse and Zeelenberg detector (Lourenço et al. 2012) in NeuroKit2.

    Parameters and return as in `neurokit`. Below 110 Hz, where the host's 48–52 Hz notch does not fit, its default cleaning is used.
    """
    return _run(signal, clean="engzeemod2012" if signal.sampling_rate >= 110 else "neurokit", find="engzeemod2012")


def _run(signal: Signal, *, clean: str, find: str, tip: bool = False) -> NDArray[np.float64]:
    """Clean, find, and keep the events that stand on recorded, moving signal."""
    rate = signal.sampling_rate
    known = np.isfinite(signal.values)
    if len(signal) < _SHORTEST_S * rate or rate < _LOWEST_RATE_HZ or known.sum() < _SHORTEST_S * rate:
        return np.empty(0)
    values = _bridged(signal.values, known)
    # Whole steps of the trace: rounding inside the filters of a lead that stands still is no signal.
    if np.ptp(values) <= 1e-9 * max(1.0, float(np.abs(values).max())):
        return np.empty(0)
    nk = _host()
    cleaned = nk.ecg_clean(values, sampling_rate=rate, method=clean)
    with _HOST, warnings.catch_warnings():
        warnings.simplefilter("ignore")
        peaks = nk.ecg_findpeaks(cleaned, sampling_rate=rate, method=find)["ECG_R_Peaks"]
    samples = np.unique(np.asarray(peaks, dtype=np.float64).astype(np.int64))
    if tip:
        samples = _tips(cleaned, samples, rate)
    samples = samples[(samples >= 0) & (samples < len(signal))]
    samples = samples[known[samples] & _moves(values, samples, rate)]
    return signal.start_s + samples / rate


def _host() -> Any:
    """NeuroKit2, imported on first use; some of its imports warn."""
    with _HOST, warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import neurokit2
    return neurokit2


def _bridged(values: NDArray[np.float64], known: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Straight lines across what is missing, so that filters neither spread NaN nor see a step."""
    if known.all():
        return values
    place = np.flatnonzero(known)
    return np.interp(np.arange(len(values)), place, values[place])


def _moves(values: NDArray[np.float64], samples: NDArray[np.int64], rate: float) -> NDArray[np.bool_]:
    """True where the trace changes at all within `_STILL_S` of the event."""
    changes = np.concatenate([[0], np.cumsum(np.diff(values) != 0)])
    reach = max(1, round(_STILL_S * rate))
    last = len(values) - 1
    return changes[np.minimum(samples + reach, last)] > changes[np.maximum(samples - reach, 0)]


def _tips(cleaned: NDArray[np.float64], samples: NDArray[np.int64], rate: float) -> NDArray[np.int64]:
    """The tip of the complex near each event; one polarity for the stretch, that of the taller side."""
    if not len(samples):
        return samples
    reach = max(1, round(_TIP_S * rate))
    index = np.clip(samples[:, None] + np.arange(-reach, reach + 1), 0, len(cleaned) - 1)
    around = cleaned[index] - np.median(cleaned)
    upright = np.median(around.max(axis=1)) >= np.median(-around.min(axis=1))
    best = (around if upright else -around).argmax(axis=1)
    return np.unique(index[np.arange(len(samples)), best])
