"""Which channel plays which role, by label and unit; the user's word wins."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass

from caval import units
from caval.errors import InputError
from caval.recording import Recording

__all__ = ["PRESSURE_ROLES", "ROLES", "assign_roles"]


@dataclass(frozen=True)
class _Role:
    """Words that name a role when they stand alone in a label; the earlier the word, the better the match."""

    words: tuple[str, ...]
    is_pressure: bool = False


ROLES: dict[str, _Role] = {
    "cvp": _Role(("cvp", "rap", "central venous pressure", "central venous", "ra", "rap1", "cvp1", "cvp2"), is_pressure=True),
    "ecg": _Role(("ii", "ecg", "ekg", "ecg1", "ecg2", "mlii", "i", "iii", "v", "v1", "v2", "v3", "v4", "v5", "v6", "avr", "avl", "avf")),
    "abp": _Role(("abp", "art", "ibp", "arterial", "ao", "aop", "fap", "rad", "radial", "fem", "art1", "art2", "bp"), is_pressure=True),
    "pap": _Role(("pap", "pa", "pulmonary"), is_pressure=True),
    "paw": _Role(("paw", "awp", "airway"), is_pressure=True),
    "co2": _Role(("co2", "etco2", "capno", "capnogram")),
    "resp": _Role(("resp", "rsp", "respiration", "thorax", "chest", "imp", "impedance", "flow")),
    "pleth": _Role(("pleth", "ppg", "spo2 wave", "plethysmogram")),
}
"""Roles that stages may ask for, in the order in which labels are tried."""

PRESSURE_ROLES = frozenset(name for name, role in ROLES.items() if role.is_pressure)


def _rank(label: str, role: _Role) -> int | None:
    words = re.sub(r"[^a-z0-9]+", " ", label.lower())
    for rank, word in enumerate(role.words):
        if re.search(rf"(?<!\S){re.escape(word)}(?!\S)", words):
            return rank
    return None


def assign_roles(recording: Recording, chosen: Mapping[str, str] | None = None, *, required: bool = True) -> dict[str, str]:
    """Label of the channel for every role that can be filled, ``{"cvp": "CVP", "ecg": "ECG II"}``.

    Parameters
    ----------
    recording : Recording
    chosen : mapping of str to str, optional
        The user's word, role to label; it wins over the labels' own.
    required : bool
        Whether there must be a venous pressure, and one alone; else a doubtful ``cvp`` is left out.

    Raises
    ------
    InputError
        An unknown role or label; no channel for ``cvp``, or more than one: the message lists the channels and says how to
        name one.
    """
    roles: dict[str, str] = {}
    for asked, label in (chosen or {}).items():
        if asked not in ROLES:
            raise InputError(f"no role {asked!r}; roles are: {', '.join(ROLES)}")
        roles[asked] = recording.channel(label).label
    for name, role in ROLES.items():
        if name in roles:
            continue
        ranked = [
            (rank, i)
            for i, channel in enumerate(recording.channels)
            if channel.label not in roles.values() and (rank := _rank(channel.label, role)) is not None
            and not (name == "ecg" and units.is_pressure_unit(channel.unit))
        ]
        if name == "cvp" and len(ranked) > 1:
            if not required:
                continue
            found = ", ".join(repr(recording.labels[i]) for _, i in ranked)
            raise InputError(f"more than one channel could be the venous pressure: {found}. Name one with --role cvp=LABEL")
        if ranked:
            roles[name] = recording.labels[min(ranked)[1]]
    if "cvp" not in roles and required:
        listed = ", ".join(f"{c.label!r} ({c.unit or 'no unit'}, {c.sampling_rate:g} Hz)" for c in recording.channels)
        raise InputError(f"no venous-pressure channel in {recording.name!r}; there are: {listed or 'none'}. Name it with --role cvp=LABEL")
    return roles
