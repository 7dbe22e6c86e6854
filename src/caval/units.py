"""Pressure units. Inside caval every pressure is in mmHg; conversion happens once, at the border.

Factors follow from definitions: 1 mmHg = 133.322387415 Pa (conventional millimetre of mercury, ISO 80000-4 annex) and
1 cmH2O = 98.0665 Pa (conventional, water at 4 °C).
"""

from __future__ import annotations

import re

from caval.errors import InputError

__all__ = ["PRESSURE_UNITS", "is_pressure_unit", "mmhg_per_unit"]

_PA_PER_MMHG = 133.322387415

PRESSURE_UNITS: dict[str, float] = {
    "mmHg": 1.0,
    "cmH2O": 98.0665 / _PA_PER_MMHG,
    "Pa": 1.0 / _PA_PER_MMHG,
    "hPa": 100.0 / _PA_PER_MMHG,
    "mbar": 100.0 / _PA_PER_MMHG,
    "kPa": 1000.0 / _PA_PER_MMHG,
}
"""mmHg in one of each unit."""

_SPELLINGS = {name.lower(): name for name in PRESSURE_UNITS} | {"torr": "mmHg", "cmwater": "cmH2O"}


def _key(unit: str) -> str:
    return re.sub(r"[\s\[\]_.\-]", "", unit).replace("₂", "2").lower()


def is_pressure_unit(unit: str) -> bool:
    """True when `unit` is a spelling of a pressure unit: ``mmHg``, ``mm Hg``, ``mm[Hg]``, ``cmH₂O``, ``kPa`` …"""
    return _key(unit) in _SPELLINGS


def mmhg_per_unit(unit: str, *, channel: str = "") -> float:
    """mmHg in one `unit`.

    >>> round(mmhg_per_unit("cmH2O"), 6)
    0.735559

    Raises
    ------
    InputError
        `unit` is no pressure unit; the message names `channel` and the option that sets the unit.
    """
    try:
        return PRESSURE_UNITS[_SPELLINGS[_key(unit)]]
    except KeyError:
        shown = f"unit {unit!r}" if unit.strip() else "no unit"
        where = f"channel {channel!r} has {shown}" if channel else f"{shown} is not known"
        raise InputError(
            f"{where}, which is no pressure unit; allowed: {', '.join(PRESSURE_UNITS)}. "
            f"Say what it is with --unit {channel or 'LABEL'}=mmHg"
        ) from None
