"""Ranges of parameters."""

from __future__ import annotations

import numpy as np

from caval.errors import InputError

__all__ = ["within"]


def within(name: str, value: float, low: float, high: float, unit: str = "") -> None:
    """Raise InputError that names a value outside its range."""
    if not low <= value <= high or (np.isinf(high) and not np.isfinite(value)):
        allowed = f"{low:g} or more" if np.isinf(high) else f"between {low:g} and {high:g}"
        raise InputError(f"{name} = {value!r}: it must be {allowed}{unit}")
