"""A caval Recording of an MNE Raw, and the pipeline run on it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from datetime import timedelta
from functools import cache

import mne
import numpy as np
from numpy.typing import NDArray

from caval import units
from caval.api import mark
from caval.errors import InputError
from caval.recording import Channel, Recording
from caval.result import Result
from caval.roles import PRESSURE_ROLES, assign_roles

__all__ = ["mark_raw", "recording_from_raw"]


def recording_from_raw(raw: mne.io.BaseRaw, *, reject_by_annotation: bool = False) -> Recording:
    """A Recording of the channels of `raw`, each loaded whole when it is first asked for.

    0 s of the recording is the first sample of `raw` (``raw.times[0]``), whatever its ``first_samp``. A channel is read in one piece,
    because MNE resamples the slower channels of a mixed-rate EDF piece by piece and the pieces would not agree at their edges.

    Parameters
    ----------
    raw : instance of Raw
    reject_by_annotation : bool
        Stretches annotated ``BAD…`` for a channel, or for all, are gaps of that channel.
    """
    rate = float(raw.info["sfreq"])
    channels = []
    for i, (label, kind) in enumerate(zip(raw.ch_names, raw.get_channel_types(), strict=True)):
        gaps = _rejected(raw, label) if reject_by_annotation else np.empty((0, 2), np.int64)
        channels.append(Channel(label, "V" if kind == "ecg" else "", rate, raw.n_times, _loader(raw, i), gaps=gaps))
    date = raw.info["meas_date"]
    start = None if date is None else date.replace(tzinfo=None) + timedelta(seconds=raw.first_time)
    names = [f for f in raw.filenames if f is not None]
    return Recording(names[0].stem if names else "raw", tuple(channels), start)


def _loader(raw: mne.io.BaseRaw, index: int) -> Callable[[int, int], NDArray]:
    @cache
    def whole() -> NDArray[np.float64]:
        return raw.get_data(picks=[index], verbose="ERROR")[0]

    return lambda start, stop: whole()[start:stop]


def _rejected(raw: mne.io.BaseRaw, label: str) -> NDArray[np.int64]:
    """Sample ranges under BAD annotations that concern the channel, merged; shape (k, 2)."""
    notes = raw.annotations
    merged: list[list[int]] = []
    for i, text in enumerate(notes.description):  # in order of onset
        if not text.upper().startswith("BAD") or (notes.ch_names[i] and label not in notes.ch_names[i]):
            continue
        bounds = notes.onset[i] - raw.first_time + np.array([0.0, notes.duration[i]])
        start, stop = np.clip(np.rint(bounds * raw.info["sfreq"]), 0, raw.n_times).astype(int)
        if stop > start:
            if merged and start <= merged[-1][1]:
                merged[-1][1] = max(merged[-1][1], int(stop))
            else:
                merged.append([int(start), int(stop)])
    return np.asarray(merged, dtype=np.int64).reshape(-1, 2)


def mark_raw(
    raw: mne.io.BaseRaw,
    function: str,
    *,
    ch_name: str | None = None,
    ecg: str | None = None,
    unit: str = "mmHg",
    reject_by_annotation: bool = True,
) -> Result:
    """The pipeline's result for a Raw; times are seconds from its first sample.

    Raises
    ------
    InputError
        A name that is no channel, no venous-pressure channel or more than one, a unit that is no pressure unit.
    """
    if not isinstance(raw, mne.io.BaseRaw):
        raise InputError(f"caval error: {function}(): 'raw' must be an instance of mne.io.Raw, not {type(raw).__name__}")
    units.mmhg_per_unit(unit)
    recording = recording_from_raw(raw, reject_by_annotation=reject_by_annotation)
    chosen = {role: name for role, name in (("cvp", ch_name), ("ecg", ecg or _ecg_channel(raw, ch_name))) if name is not None}
    for name in chosen.values():
        if name not in raw.ch_names:
            raise InputError(f"caval error: {function}(): {name!r} not in channel list ({', '.join(raw.ch_names)})")
    try:
        roles = assign_roles(_without_bads(recording, raw, chosen), chosen)
    except InputError as error:
        hint = str(error).replace("--role cvp=LABEL", "ch_name")
        raise InputError(f"caval error: {function}(): {hint}") from None
    pressures = {label: unit for role, label in roles.items() if role in PRESSURE_ROLES}
    return mark(recording, roles=roles, units=pressures)


def _ecg_channel(raw: mne.io.BaseRaw, ch_name: str | None) -> str | None:
    """The first good channel of type ecg; None leaves the choice to the labels."""
    typed = [n for n, kind in zip(raw.ch_names, raw.get_channel_types(), strict=True) if kind == "ecg" and n not in raw.info["bads"]]
    return next((n for n in typed if n != ch_name), None)


def _without_bads(recording: Recording, raw: mne.io.BaseRaw, chosen: Mapping[str, str]) -> Recording:
    """The channels that may be picked by label: not those marked bad, unless they were named."""
    bad = set(raw.info["bads"]) - set(chosen.values())
    return replace(recording, channels=tuple(c for c in recording.channels if c.label not in bad))
