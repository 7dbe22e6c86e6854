"""Epochs around the waves of the venous pressure."""

from __future__ import annotations

from typing import Any

import mne
from mne.utils import verbose as _verbose

from caval.errors import InputError
from caval_mne.find_cvp_events import find_cvp_events

__all__ = ["create_cvp_epochs"]


@_verbose
def create_cvp_epochs(
    raw: mne.io.BaseRaw,
    ch_name: str | None = None,
    event_id: int = 999,
    picks: Any = None,
    tmin: float = -0.5,
    tmax: float = 0.5,
    *,
    mark: str = "a",
    ecg: str | None = None,
    unit: str = "mmHg",
    reject: dict[str, float] | None = None,
    flat: dict[str, float] | None = None,
    baseline: tuple[float | None, float | None] | None = None,
    preload: bool = True,
    reject_by_annotation: bool = True,
    decim: int = 1,
    verbose: bool | str | int | None = None,  # noqa: ARG001  (read by MNE's decorator)
) -> mne.Epochs:
    """Epochs around one kind of wave of the venous pressure; the sister of ``mne.preprocessing.create_ecg_epochs``.

    Parameters
    ----------
    raw : instance of Raw
        Not changed.
    ch_name, ecg, unit
        As in `annotate_cvp`.
    event_id : int
        The index to assign to the events.
    picks
        Channels to include; None takes all, pressures (type ``misc``) too.
    tmin, tmax : float
        Start and end of an epoch in seconds from the wave.
    mark : {"a", "z", "c", "x", "v", "y", "h"}
        The wave.
    reject, flat, baseline, preload, reject_by_annotation, decim
        As in ``mne.Epochs``. No baseline is taken off: the level is the measurement.
    verbose : bool | str | int | None
        Control verbosity of the logging output, as in MNE.

    Returns
    -------
    cvp_epochs : instance of Epochs

    Raises
    ------
    InputError
        As in `annotate_cvp`; no wave of that kind was found.

    See Also
    --------
    annotate_cvp, find_cvp_events

    Examples
    --------
    >>> import caval
    >>> from caval_mne import RawCaval
    >>> raw = RawCaval(caval.demo_recording(minutes=0.5), verbose="ERROR")
    >>> create_cvp_epochs(raw, mark="v", verbose="ERROR").get_data().shape[1:]
    (3, 501)
    """
    events, _, _ = find_cvp_events(
        raw, event_id=event_id, ch_name=ch_name, mark=mark, ecg=ecg, unit=unit, reject_by_annotation=reject_by_annotation
    )
    if not len(events):
        raise InputError(f"caval error: create_cvp_epochs(): no {mark} wave was found; annotate_cvp(raw) tells what stands in the way")
    return mne.Epochs(
        raw, events, event_id=event_id, tmin=tmin, tmax=tmax, baseline=baseline, picks="all" if picks is None else picks, preload=preload,
        reject=reject, flat=flat, proj=False, decim=decim, reject_by_annotation=reject_by_annotation,
    )
