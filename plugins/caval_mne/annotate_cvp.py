"""Waves and unusable stretches of the venous pressure as MNE annotations."""

from __future__ import annotations

import mne
import numpy as np
from mne.utils import logger
from mne.utils import verbose as _verbose

from caval.result import Result
from caval_mne._recording import mark_raw

__all__ = ["annotate_cvp"]


@_verbose
def annotate_cvp(
    raw: mne.io.BaseRaw,
    ch_name: str | None = None,
    ecg: str | None = None,
    *,
    unit: str = "mmHg",
    reject_by_annotation: bool = True,
    mark_bad: bool = True,
    verbose: bool | str | int | None = None,  # noqa: ARG001  (read by MNE's decorator)
) -> mne.Annotations:
    """Mark the waves of the venous pressure and the stretches that cannot be read.

    Parameters
    ----------
    raw : instance of Raw
        Not changed. Channels are picked by label, whatever their type: MNE's EDF reader calls every channel ``eeg`` and keeps the
        numbers of a pressure channel as they are (mmHg stays mmHg, though MNE says V).
    ch_name : str | None
        The venous-pressure channel. None picks it by label (``CVP``, ``RAP`` …) among the channels not marked bad.
    ecg : str | None
        The ECG channel. None picks the first of type ``ecg``, else one by label. An arterial pressure is found by label.
    unit : str
        What the numbers in the pressure channels are: ``mmHg``, ``cmH2O``, ``kPa``, ``Pa``, ``hPa`` or ``mbar``.
    reject_by_annotation : bool
        Leave out stretches that are annotated ``BAD…`` already, for the channel or for all.
    mark_bad : bool
        Begin the text of unusable stretches with ``BAD_``, so that epochs over them are rejected. MNE (as of 1.13) rejects such epochs
        whatever channels they hold and whatever ``ch_names`` the annotation has: say False where other channels count as well, and
        the texts are ``CVP/flat`` and so on.
    verbose : bool | str | int | None
        Control verbosity of the logging output, as in MNE.

    Returns
    -------
    annot : instance of Annotations
        ``CVP/a``, ``CVP/c``, … with duration 0, and ``BAD_CVP/flat`` and so on, every one with the ``ch_names`` of its channel;
        ``RHYTHM/sinus`` and so on for the stretches of each rhythm, which belong to all channels.
        ``orig_time`` is the ``meas_date`` of `raw`, so ``raw.set_annotations(raw.annotations + annot)`` puts them in place, also when
        `raw` is cropped.

    Raises
    ------
    InputError
        No venous-pressure channel, more than one, a name that is no channel, or no pressure unit.

    See Also
    --------
    find_cvp_events, create_cvp_epochs

    Notes
    -----
    Times lie on the clock of ``raw.annotations``::

        meas_date                first_samp                    mark
            |------ first_time ------|-------- time_s ----------|
            |------------------- onset -------------------------|       (without meas_date: onset = time_s)

    MNE's EDF reader brings the slower channels of a file to the fastest rate by Fourier interpolation, which leaves a ripple on what was
    flat or cut off. ``RawCaval(caval.read("record.edf"))`` keeps the recorded samples and joins them by straight lines.

    Examples
    --------
    >>> import caval, mne
    >>> from caval_mne import RawCaval
    >>> raw = RawCaval(caval.demo_recording(minutes=0.5), verbose="ERROR")
    >>> raw = raw.set_annotations(annotate_cvp(raw, verbose="ERROR"))
    >>> events, event_id = mne.events_from_annotations(raw, regexp="^CVP/", verbose="ERROR")
    >>> epochs = mne.Epochs(raw, events, event_id, tmin=-0.2, tmax=0.3, baseline=None, picks=["CVP"], preload=True, verbose="ERROR")
    >>> sorted(epochs.event_id)[:2], len(epochs["a"]) > 25
    (['CVP/a', 'CVP/c'], True)
    """
    result = mark_raw(raw, "annotate_cvp", ch_name=ch_name, ecg=ecg, unit=unit, reject_by_annotation=reject_by_annotation)
    for line in result.warnings:
        logger.info(line)
    logger.info(f"Number of CVP marks: {len(result.marks)} on {len(result.beats)} beats; stretches set aside: {len(result.spans)}")
    return _annotations(raw, result, mark_bad)


def _annotations(raw: mne.io.BaseRaw, result: Result, mark_bad: bool) -> mne.Annotations:
    track = result.track
    texts = np.asarray([t if mark_bad else t.removeprefix("BAD_") for t in track.texts], dtype=object)
    labels = result.recording.labels
    date = raw.info["meas_date"]
    return mne.Annotations(
        onset=track.onset_s + (raw.first_time if date is not None else 0.0),
        duration=track.duration_s,
        description=texts[track.code] if len(track) else [],
        orig_time=date,
        ch_names=[[labels[i]] if i >= 0 else [] for i in track.channel],
    )
