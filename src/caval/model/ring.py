"""The ring of a line after a fast flush, and what it says of the line (Gardner, Anesthesiology 1981;54:227)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from caval.errors import InputError
from caval.model._checks import within

__all__ = ["Ring", "fast_flush", "find_ring", "ring_response"]


@dataclass(frozen=True)
class Ring:
    """The ring after a flush: its frequency (Hz), the ratio of successive half-cycle swings, how many swings stood out of the pulse, and
    the natural frequency (Hz) and damping they stand for."""

    ring_hz: float
    ratio: float
    swings: int
    natural_frequency_hz: float
    damping: float


def ring_response(f_n: float, zeta: float, time_s: ArrayLike) -> NDArray[np.float64]:
    """What a column held at 1 does when it is let go to 0 at time 0: 1 before, then the ring (below ζ = 1) or the creep.

    Parameters
    ----------
    f_n, zeta : float
        Natural frequency, Hz, and damping.
    time_s : array
        Seconds since it was let go.
    """
    within("f_n", f_n, 1e-3, 1e4, " Hz")
    within("zeta", zeta, 0.0, 50)
    omega = 2 * np.pi * f_n
    t = np.maximum(np.asarray(time_s, dtype=np.float64), 0.0)
    if abs(zeta - 1) < 1e-9:
        return (1 + omega * t) * np.exp(-omega * t)
    if zeta < 1:
        root = np.sqrt(1 - zeta**2)
        return np.exp(-zeta * omega * t) * (np.cos(root * omega * t) + zeta / root * np.sin(root * omega * t))
    root = np.sqrt(zeta**2 - 1)
    slow, fast = omega * (zeta - root), omega * (zeta + root)
    return (fast * np.exp(-slow * t) - slow * np.exp(-fast * t)) / (fast - slow)


def fast_flush(ring_hz: float, ratio: float) -> tuple[float, float]:
    """Natural frequency (Hz) and damping from the ring of a fast flush.

    Parameters
    ----------
    ring_hz : float
        One over the period of the ring.
    ratio : float
        Of successive half-cycle swings, between 0 and 1: each swing from a peak to the next trough, over the one before.

    Notes
    -----
    ``ζ = -ln r / √(π² + ln² r)``, ``f_n = f_d / √(1 - ζ²)``: the free ring of a system of second order.

    Examples
    --------
    >>> f_n, zeta = fast_flush(25 / 1.7, 17 / 24)
    >>> round(f_n, 1), round(zeta, 2)
    (14.8, 0.11)
    """
    within("ring_hz", ring_hz, 1e-3, 1e4, " Hz")
    if not 0 < ratio < 1:
        raise InputError(f"ratio = {ratio!r}: it must be above 0 and below 1; each swing of a ring is smaller than the one before")
    log = np.log(ratio)
    zeta = float(-log / np.hypot(np.pi, log))
    return float(ring_hz / np.sqrt(1 - zeta**2)), zeta


def find_ring(
    values: NDArray[np.float64], sampling_rate: float, released_s: float, *, longest_s: float = 1.5, smallest_mmhg: float = 4.0
) -> Ring | None:
    """The ring after the release of a fast flush, read off a trace.

    Parameters
    ----------
    values : float64 array, shape (n,)
        Pressure, mmHg.
    sampling_rate : float
        Hz; above twice the ring's frequency.
    released_s : float
        When the flush had been let go, seconds from ``values[0]``, line and monitor delay included.
    longest_s : float
        How long the ring is looked for.
    smallest_mmhg : float
        Swings below it are lost in the pulse, which goes on underneath; the ring is read until a quarter of it is left.

    Returns
    -------
    Ring or None
        None where there is nothing to read: fewer than eight samples not cut, no swing above 2.5 times `smallest_mmhg`, or a line so damped
        (ζ above 0.8) that it does not ring.

    Notes
    -----
    A free ring ``e^(-ζωt)(A cos ω_d t + B sin ω_d t)`` on a curved level is fitted by least squares: A, B and the level by linear algebra
    for every (f_n, ζ) of a coarse grid, then the best (f_n, ζ) refined. This is what is read by hand from two swings (`fast_flush`), but
    from every sample that is not cut, so that a pulse underneath or few samples a period matter less. A linear monitor filter changes the
    height of a free ring and neither its frequency nor its decay.
    """
    values = np.asarray(values, dtype=np.float64)
    start, stop = max(round(released_s * sampling_rate), 0), round((released_s + longest_s) * sampling_rate)
    part = values[start:stop]
    if len(part) < 8:
        return None
    level = float(np.median(part[len(part) // 2 :]))
    whole = (part > values.min()) & (part < values.max())  # the monitor may have cut what stands at the limits of the trace
    away = np.abs(part - level)
    height = float(away[whole].max(initial=0.0))
    if height < 2.5 * smallest_mmhg:
        return None
    still = int(np.flatnonzero(away > max(0.03 * height, smallest_mmhg))[-1]) + 1
    at: NDArray[np.float64] | None = None
    for _ in range(3):  # the end of the ring by eye, then by its own decay
        time = np.flatnonzero(whole[:still]) / sampling_rate
        if len(time) < 8:
            return None
        at = _fit_ring(time, part[:still][whole[:still]], 0.5 * sampling_rate, at)
        omega, zeta = 2 * np.pi * np.exp(at[0]), at[1]
        lasts_s = max(np.log(4 * height / smallest_mmhg) / (zeta * omega), 2 * np.pi * 1.25 / omega)
        still = min(len(part), round(lasts_s * sampling_rate))
    if at is None or at[1] > 0.8:
        return None
    f_n, zeta = float(np.exp(at[0])), float(at[1])
    ring_hz = f_n * float(np.sqrt(1 - zeta**2))
    ratio = float(np.exp(-np.pi * zeta / np.sqrt(1 - zeta**2)))
    swings = int(np.log(height / smallest_mmhg) / (zeta * 2 * np.pi * f_n) * 2 * ring_hz)
    return Ring(ring_hz, ratio, swings, f_n, zeta)


def _fit_ring(time: NDArray, heard: NDArray, highest_hz: float, start: NDArray | None) -> NDArray[np.float64]:
    """``(log f_n, ζ)`` of the free ring, on a curved level, that is nearest to what was heard."""
    from scipy.optimize import least_squares

    centred = time - time.mean()

    def left_over(at: NDArray) -> NDArray[np.float64]:
        omega, zeta = 2 * np.pi * np.exp(at[0]), at[1]
        turn, fade = omega * np.sqrt(max(1 - zeta**2, 1e-6)) * time, np.exp(-zeta * omega * time)
        basis = np.stack([fade * np.cos(turn), fade * np.sin(turn), np.ones_like(time), centred, centred**2], axis=1)
        rest: NDArray[np.float64] = heard - basis @ np.linalg.lstsq(basis, heard, rcond=None)[0]
        return rest

    if start is None:
        frequencies = np.log(np.geomspace(2.0, min(60.0, 0.9 * highest_hz), 28))
        tried = [np.array([f, z]) for f in frequencies for z in (0.06, 0.12, 0.22, 0.35, 0.55)]
        start = min(tried, key=lambda at: float(np.sum(left_over(at) ** 2)))
    bounds = ([np.log(0.5), 0.005], [np.log(highest_hz), 0.95])
    found: NDArray[np.float64] = least_squares(left_over, start, bounds=bounds, x_scale=[0.05, 0.02]).x
    return np.clip(found, [np.log(0.51), 0.006], [np.log(0.99 * highest_hz), 0.94])
