"""WFDB records, and any other caval Recording, as an MNE Raw."""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from datetime import UTC
from pathlib import Path
from typing import Any

import mne
import numpy as np
from mne.utils import verbose as _verbose
from numpy.typing import NDArray

from caval import registry, units
from caval.errors import FileError, InputError
from caval.recording import Channel, Recording
from caval.roles import ROLES
from caval.vocabulary import span_text

__all__ = ["RawCaval", "read_raw_wfdb"]

_VOLTS = {"v": 1.0, "mv": 1e-3, "uv": 1e-6, "µv": 1e-6, "μv": 1e-6, "nv": 1e-9}  # both code points of mu


class RawCaval(mne.io.BaseRaw):
    """A caval Recording as an MNE Raw, read from disk when asked for.

    Channels keep their labels. Those with a label of an ECG lead and a unit of voltage are of type ``ecg`` in volts, labels with
    the word EEG likewise ``eeg``; pressures are ``misc`` in mmHg (MNE has no type for pressure, and scales ``misc`` by 1); respiration
    is ``resp``; the rest is ``misc`` in its own unit. Units are listed in ``info["description"]``.

    MNE has one rate. Samples of channels slower than it lie on straight lines between the recorded ones, and the last one is held to
    the end of its period: nothing is filtered, nothing rings, recorded samples stay what they are::

        recorded, 125 Hz   o       o       o
        in the Raw         o . . . o . . . o . . .        500 Hz

    What was not recorded is NaN; gaps are annotated: ``BAD_ACQ_SKIP`` where one concerns every channel (``raw.filter`` goes around
    it), else ``BAD_CHANNEL/gap`` with ``ch_names``. Annotations of the recording are kept, with the names of their channels; WFDB
    beats without text have their symbol as description.

    Parameters
    ----------
    recording : Recording
    rate : float | None
        Samples per second of the Raw: only channels of exactly this rate are taken, as recorded. None takes all channels at the
        fastest rate.
    preload : bool
    verbose : bool | str | int | None
        As in MNE.

    Raises
    ------
    InputError
        No channels, or none of that `rate`.

    Examples
    --------
    >>> import caval
    >>> raw = RawCaval(caval.demo_recording(minutes=0.1), verbose="ERROR")
    >>> dict(zip(raw.ch_names, raw.get_channel_types())), raw.info["sfreq"]
    ({'ECG II': 'ecg', 'CVP': 'misc', 'ABP': 'misc'}, 500.0)
    """

    @_verbose
    def __init__(
        self, recording: Recording, *, rate: float | None = None, preload: bool = False, verbose: bool | str | int | None = None
    ) -> None:
        channels = tuple(c for c in recording.channels if rate is None or c.sampling_rate == rate)
        if not channels:
            there = ", ".join(f"{c.label!r} ({c.sampling_rate:g} Hz)" for c in recording.channels)
            raise InputError(f"no channels{'' if rate is None else f' of {rate:g} Hz'} in {recording.name!r}; there are: {there or 'none'}")
        kinds, scales, shown = zip(*map(_kind, channels), strict=True)
        stored = _Stored(channels, scales, max(c.sampling_rate for c in channels))
        info = mne.create_info([c.label for c in channels], stored.sfreq, list(kinds))
        info["description"] = "units: " + ", ".join(f"{c.label} {unit or '?'}" for c, unit in zip(channels, shown, strict=True))
        info.set_meas_date(None if recording.start_time is None else recording.start_time.replace(tzinfo=UTC))
        super().__init__(
            info, preload=preload, filenames=[recording.path], raw_extras=[{"stored": stored}], last_samps=[stored.n_times - 1],
            orig_units=dict(zip(info["ch_names"], shown, strict=True)), verbose=verbose,
        )
        self.set_annotations(_annotations(recording, channels, self))

    def _read_segment_file(
        self, data: NDArray, idx: Any, fi: int, start: int, stop: int, cals: NDArray | None, mult: NDArray | None  # noqa: ARG002
    ) -> None:
        rows = self._raw_extras[fi]["stored"].read(idx, start, stop)  # in volts, mmHg …: the calibrations of MNE are 1
        data[:] = rows if mult is None else mult @ rows


@dataclass(frozen=True, eq=False)
class _Stored:
    """The channels on the clock of the Raw. A copy of a Raw shares them; a pickled one has only what was loaded."""

    channels: tuple[Channel, ...]
    scales: tuple[float, ...]
    sfreq: float

    def __deepcopy__(self, memo: dict[int, Any]) -> _Stored:
        return self

    def __reduce__(self) -> tuple[Any, ...]:
        return _Stored, (tuple(replace(c, source=_left_behind) for c in self.channels), self.scales, self.sfreq)

    @property
    def n_times(self) -> int:
        return max(1, int(np.ceil(max(c.start_s + c.duration_s for c in self.channels) * self.sfreq - 1e-6)))

    def read(self, idx: Any, start: int, stop: int) -> NDArray[np.float64]:
        """Samples ``[start, stop)`` of the channels `idx`, shape (channels, stop - start), in the Raw's units."""
        chosen = np.arange(len(self.channels))[idx]
        return np.stack([_on_clock(self.channels[i], self.sfreq, start, stop) * self.scales[i] for i in chosen])


def _left_behind(start: int, stop: int) -> NDArray:
    raise FileError(f"samples {start} to {stop} were not loaded before the Raw was pickled; call raw.load_data() first")


def _on_clock(channel: Channel, sfreq: float, start: int, stop: int) -> NDArray[np.float64]:
    """Values at the ticks ``start … stop - 1`` of `sfreq`; the same for a tick, whatever the stretch it is read in."""
    place = (np.arange(start, stop) / sfreq - channel.start_s) * channel.sampling_rate
    near = np.rint(place)
    place = np.where(np.abs(place - near) < 1e-6, near, place)
    inside = (place >= 0) & (place < channel.n_samples)
    values = np.full(stop - start, np.nan)
    if not inside.any():
        return values
    low = np.floor(place[inside]).astype(np.int64)
    high = np.minimum(low + 1, channel.n_samples - 1)
    share = place[inside] - low
    recorded = channel.physical(int(low[0]), int(high[-1]) + 1)
    low, high = low - low[0], high - low[0]
    values[inside] = np.where(share == 0, recorded[low], recorded[low] * (1 - share) + recorded[high] * share)
    return values


def _kind(channel: Channel) -> tuple[str, float, str]:
    """MNE's channel type, the factor to its unit, and that unit's name."""
    if units.is_pressure_unit(channel.unit):
        return "misc", units.mmhg_per_unit(channel.unit), "mmHg"
    words = set(re.split(r"[^a-z0-9]+", channel.label.lower()))
    volts = _VOLTS.get(channel.unit.strip().lower())
    if volts is not None and "eeg" in words:
        return "eeg", volts, "V"
    if volts is not None and words & set(ROLES["ecg"].words):
        return "ecg", volts, "V"
    return "resp" if words & set(ROLES["resp"].words) else "misc", 1.0, channel.unit


def _annotations(recording: Recording, channels: tuple[Channel, ...], raw: mne.io.BaseRaw) -> mne.Annotations:
    """The recording's annotations and its gaps; the Raw begins at 0 s of the recording."""
    name_of = {recording.channels.index(c): name for c, name in zip(channels, raw.ch_names, strict=True)}
    onset, duration, text, names = [], [], [], []
    for track in recording.tracks.values():
        symbol = track.extra.get("symbol", np.full(len(track), ""))
        onset += track.onset_s.tolist()
        duration += np.maximum(track.duration_s, 0.0).tolist()
        text += [str(t or s) for t, s in zip(track.text, symbol, strict=True)]
        names += [[name_of[i]] if i in name_of else [] for i in track.channel]
    gaps = recording.gaps()
    gaps = gaps[gaps["channel"].isin([c.label for c in channels])].round({"onset_s": 3, "duration_s": 3})
    for (start, length), group in gaps.groupby(["onset_s", "duration_s"]):
        everywhere = len(group) == len(channels)
        onset.append(start)
        duration.append(length)
        text.append("BAD_ACQ_SKIP" if everywhere else span_text("gap", "channel"))
        names.append([] if everywhere else sorted(set(group["channel"])))
    return mne.Annotations(onset, duration, text, orig_time=raw.info["meas_date"], ch_names=names)


@_verbose
def read_raw_wfdb(
    fname: str | Path,
    preload: bool = False,
    verbose: bool | str | int | None = None,
    *,
    rate: float | None = None,
) -> RawCaval:
    """Read a WFDB record; see `RawCaval` for channel types, units, rates and gaps.

    Parameters
    ----------
    fname : path-like
        The header file (``.hea``), or the record's name without ending.
    preload : bool
        If True, the data are loaded; else they are read from disk when asked for.
    verbose : bool | str | int | None
        Control verbosity of the logging output, as in MNE.
    rate : float | None
        Take only the channels of this rate (Hz), as recorded. None takes all, at the fastest rate.

    Returns
    -------
    raw : instance of RawCaval
        See ``mne.io.Raw`` for attributes and methods. ``meas_date`` is the record's start time, microseconds kept, taken for UTC as
        MNE demands.

    Raises
    ------
    FileError
        No such record, or a broken one.
    InputError
        No channel of that `rate`.
    """
    reader = registry.pick(registry.formats(), "wfdb", "format").read
    if reader is None:
        raise FileError("the installed format 'wfdb' cannot read")
    return RawCaval(reader(Path(fname)), rate=rate, preload=preload, verbose=verbose)
