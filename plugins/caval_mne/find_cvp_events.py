"""Waves of the venous pressure as MNE events."""

from __future__ import annotations

import mne
import numpy as np
from mne.utils import logger
from mne.utils import verbose as _verbose
from numpy.typing import NDArray

from caval.errors import InputError
from caval.vocabulary import SPANS, WAVES
from caval_mne._recording import mark_raw

__all__ = ["find_cvp_events"]

_HARMLESS = [kind for kind, term in SPANS.items() if not term.unusable]


@_verbose
def find_cvp_events(
    raw: mne.io.BaseRaw,
    event_id: int = 999,
    ch_name: str | None = None,
    tstart: float = 0.0,
    *,
    mark: str = "a",
    ecg: str | None = None,
    unit: str = "mmHg",
    reject_by_annotation: bool = True,
    verbose: bool | str | int | None = None,  # noqa: ARG001  (read by MNE's decorator)
) -> tuple[NDArray[np.int64], int, float]:
    """Find one kind of wave of the venous pressure; the sister of ``mne.preprocessing.find_ecg_events``.

    Parameters
    ----------
    raw : instance of Raw
        Not changed.
    event_id : int
        The index to assign to the events.
    ch_name, ecg, unit, reject_by_annotation
        As in `annotate_cvp`.
    tstart : float
        Start of the search, seconds after the first sample of `raw`.
    mark : {"a", "z", "c", "x", "v", "y", "h"}
        The wave.
    verbose : bool | str | int | None
        Control verbosity of the logging output, as in MNE.

    Returns
    -------
    cvp_events : int array, shape (n_events, 3)
        Sample number (``first_samp`` included, as in all of MNE's events), 0, `event_id`.
    ch_cvp : int
        Index of the channel used.
    average_rate : float
        Waves a minute over the time in which the trace could be read; 0 when there is none.

    Raises
    ------
    InputError
        As in `annotate_cvp`; a wave that there is not.

    See Also
    --------
    annotate_cvp, create_cvp_epochs

    Examples
    --------
    >>> import caval
    >>> from caval_mne import RawCaval
    >>> raw = RawCaval(caval.demo_recording(minutes=0.5), verbose="ERROR")
    >>> events, ch_cvp, rate = find_cvp_events(raw, mark="v", verbose="ERROR")
    >>> events.shape[1], raw.ch_names[ch_cvp], 68 < rate < 76
    (3, 'CVP', True)
    """
    if mark not in WAVES:
        raise InputError(f"caval error: find_cvp_events(): mark={mark!r}; allowed: {', '.join(WAVES)}")
    result = mark_raw(raw, "find_cvp_events", ch_name=ch_name, ecg=ecg, unit=unit, reject_by_annotation=reject_by_annotation)
    label = result.roles["cvp"]
    logger.info(f"Using channel {label} to identify {mark} waves.")
    time_s = result.marks.loc[result.marks["mark"] == mark, "time_s"].to_numpy(float)
    time_s = time_s[time_s >= tstart]
    samples = np.clip(np.rint(time_s * raw.info["sfreq"]).astype(np.int64), 0, raw.n_times - 1) + raw.first_samp
    events = np.column_stack([samples, np.zeros_like(samples), np.full_like(samples, event_id)])

    spans = result.spans[(result.spans["channel"] == label) & ~result.spans["kind"].isin(_HARMLESS)]
    onset = spans["onset_s"].to_numpy(float)
    readable_s = _readable(onset, onset + spans["duration_s"].to_numpy(float), tstart, raw.n_times / raw.info["sfreq"])
    rate = float(60.0 * len(events) / readable_s) if readable_s > 0 else 0.0
    logger.info(f"Number of CVP events detected : {len(events)} (average rate {rate:.1f} / min.)")
    return events, raw.ch_names.index(label), rate


def _readable(starts_s: NDArray[np.float64], stops_s: NDArray[np.float64], start_s: float, stop_s: float) -> float:
    """Seconds of ``[start_s, stop_s)`` that no span covers; spans may overlap."""
    total, reached = 0.0, start_s
    for i in np.argsort(starts_s, kind="stable"):
        total += max(0.0, min(starts_s[i], stop_s) - reached)
        reached = max(reached, stops_s[i])
    return total + max(0.0, stop_s - reached)
