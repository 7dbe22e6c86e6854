"""Agreement of two lists of events: which of them are the same."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from caval.errors import InputError

__all__ = ["Agreement", "match_events"]


class Agreement(NamedTuple):
    """Events matched one to one.

    `reference` and `found` are index arrays of equal length, in time order; `missed` and `extra` the indices left over.
    """

    reference: NDArray[np.int64]
    found: NDArray[np.int64]
    missed: NDArray[np.int64]
    extra: NDArray[np.int64]

    @property
    def sensitivity(self) -> float:
        """Share of the reference that was found; NaN without a reference."""
        total = len(self.reference) + len(self.missed)
        return len(self.reference) / total if total else float("nan")

    @property
    def precision(self) -> float:
        """Share of the found that is in the reference; NaN when nothing was found."""
        total = len(self.found) + len(self.extra)
        return len(self.found) / total if total else float("nan")


def match_events(reference_s: ArrayLike, found_s: ArrayLike, *, window_s: float = 0.15) -> Agreement:
    """Match two sorted lists of times one to one, the nearest pairs first.

    Parameters
    ----------
    reference_s, found_s : float array
        Seconds, sorted.
    window_s : float
        Largest distance of a pair; 150 ms for beats (ANSI/AAMI EC57), 50 ms or less to tell an a from a c.

    Raises
    ------
    InputError
        Times out of order.

    Examples
    --------
    >>> match_events([1.0, 2.0, 3.0], [1.02, 2.5, 3.01]).sensitivity
    0.6666666666666666
    """
    reference, found = np.asarray(reference_s, dtype=np.float64), np.asarray(found_s, dtype=np.float64)
    for name, times in (("reference_s", reference), ("found_s", found)):
        if np.any(np.diff(times) < 0):
            raise InputError(f"{name} is not sorted")
    first, last = np.searchsorted(found, reference - window_s, "left"), np.searchsorted(found, reference + window_s, "right")
    rows = np.repeat(np.arange(len(reference)), last - first)
    columns = np.concatenate([np.arange(a, b) for a, b in zip(first, last, strict=True)]).astype(np.int64) if len(rows) else rows
    free_reference, free_found = np.ones(len(reference), dtype=bool), np.ones(len(found), dtype=bool)
    partner = np.full(len(reference), -1, dtype=np.int64)
    for k in np.argsort(np.abs(found[columns] - reference[rows]), kind="stable"):
        i, j = rows[k], columns[k]
        if free_reference[i] and free_found[j]:
            partner[i], free_reference[i], free_found[j] = j, False, False
    hit = np.flatnonzero(partner >= 0)
    return Agreement(hit, partner[hit], np.flatnonzero(free_reference), np.flatnonzero(free_found))
