"""Effective compliance from paired steps of volume and pressure."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from caval.errors import InputError

__all__ = ["Ratio", "cutoff", "effective_compliance", "normal_quantile", "short", "span_text"]


@dataclass(frozen=True)
class Ratio:
    """A compliance from paired steps, ml/mmHg.

    Attributes
    ----------
    value : float
        The estimate.
    low, high : float
        Ends of the confidence interval. ``inf`` (or ``-inf``) where the pressure steps cannot be told from nothing.
    level : float
    steps : int
    bounded : bool
    statement : str
    """

    value: float
    low: float
    high: float
    level: float
    steps: int
    bounded: bool
    statement: str


def cutoff(level: float) -> float:
    """Rise of -2 log L at the edge of a profile interval: χ² quantile, one degree of freedom (3.84 at 0.95)."""
    return normal_quantile(level) ** 2


def normal_quantile(level: float) -> float:
    """Quantile of the normal distribution that a two-sided interval of that level reaches."""
    from scipy.special import ndtri

    return float(ndtri(0.5 + 0.5 * level))


def effective_compliance(
    volume_steps_ml: ArrayLike,
    pressure_steps_mmhg: ArrayLike,
    *,
    planned_ml: ArrayLike | None = None,
    volume_sd_ml: float | None = None,
    pressure_sd_mmhg: float | None = None,
    level: float = 0.95,
) -> Ratio:
    """Effective compliance from paired steps of volume and pressure.

    Parameters
    ----------
    volume_steps_ml, pressure_steps_mmhg : array, shape (n,)
        What was added (below 0: taken) at each step, as measured, and what the pressure did. Steps may differ in size.
    planned_ml : array, shape (n,), optional
        The sizes the steps were meant to have (``[50, 50, 100]``). Give it where the measured volumes are uncertain: they then count with
        their own errors. Without it the volumes stand for their plan, and an error of a share e in them makes the compliance too large by
        about e² (1 % for errors of 10 %).
    volume_sd_ml, pressure_sd_mmhg : float, optional
        Standard deviation of one reading of each. With both given they are taken as known, and one step is enough; without, the scatter of
        two or more steps gives them.
    level : float

    Returns
    -------
    Ratio
        Fieller's interval (J R Stat Soc B 1954;16:175, from memory), each step weighted by its planned size w: every C at which
        ``Σ w (ΔV - C ΔP)`` cannot be told from 0. It is exact for normal errors of one size in all steps, in both volume and pressure, and
        open when the pressure steps themselves cannot be told from none. The estimate is ``Σ wΔV / Σ wΔP``; with steps of one size, the
        ratio of the sums.

    Raises
    ------
    InputError
        Arrays that are not of one length; too few steps; one of the standard deviations without the other.

    Examples
    --------
    >>> effective_compliance([50, 50, 100], [2.1, 1.9, 4.0]).statement
    'effective compliance 25 ml/mmHg, 95 % interval 23 to 27 ml/mmHg, from 3 steps'
    """
    from scipy.special import stdtrit

    volume, pressure = np.asarray(volume_steps_ml, dtype=np.float64), np.asarray(pressure_steps_mmhg, dtype=np.float64)
    plan = volume if planned_ml is None else np.asarray(planned_ml, dtype=np.float64)
    alike = volume.ndim == 1 and volume.shape == pressure.shape == plan.shape
    if not (alike and np.isfinite([volume, pressure, plan]).all() and plan.any()):
        shapes = f"{volume.shape}, {pressure.shape} and {plan.shape}"
        raise InputError(f"steps of volume, pressure and plan of shape {shapes}: finite values of one length, not all 0, are needed")
    if (volume_sd_ml is None) != (pressure_sd_mmhg is None):
        raise InputError("volume_sd_ml and pressure_sd_mmhg go together: give both or none")
    n = len(volume)
    weight = float(plan @ plan)
    slopes = np.array([plan @ volume, plan @ pressure]) / weight  # measured per planned ml
    if volume_sd_ml is not None and pressure_sd_mmhg is not None:
        if not (volume_sd_ml >= 0 and pressure_sd_mmhg >= 0 and volume_sd_ml + pressure_sd_mmhg > 0):
            raise InputError(f"volume_sd_ml = {volume_sd_ml!r}, pressure_sd_mmhg = {pressure_sd_mmhg!r}: 0 or more, and not both 0")
        spread = np.diag([volume_sd_ml**2, pressure_sd_mmhg**2]) / weight
        quantile = normal_quantile(level)
    else:
        if n < 2:
            raise InputError(f"{n} step: two or more are needed, or volume_sd_ml and pressure_sd_mmhg")
        rest = np.stack([volume, pressure]) - slopes[:, None] * plan
        spread = rest @ rest.T / (n - 1) / weight
        quantile = float(stdtrit(n - 1, 0.5 + 0.5 * level))
    return _fieller(slopes, spread, quantile, level, n)


def _fieller(slopes: NDArray[np.float64], spread: NDArray[np.float64], quantile: float, level: float, n: int) -> Ratio:
    """Every C with ``(v - C p)² ≤ q² (s_vv - 2 C s_vp + C² s_pp)``, a quadratic in C."""
    v, p = float(slopes[0]), float(slopes[1])
    a = p**2 - quantile**2 * spread[1, 1]
    b = v * p - quantile**2 * spread[0, 1]
    c = v**2 - quantile**2 * spread[0, 0]
    root = float(np.sqrt(max(b**2 - a * c, 0.0)))
    value = v / p if p else float("inf")
    steps = f"from {n} step{'s' * (n > 1)}"
    if a > 0:
        low, high = (b - root) / a, (b + root) / a
        words = f"effective compliance {short(value)} ml/mmHg, {100 * level:g} % interval {span_text(low, high)} ml/mmHg, {steps}"
        return Ratio(value, low, high, level, n, True, words)
    if c > 0 and a < 0:  # one root below 0 and one above: of what is left, only the ray from the latter is a compliance
        low = (b - root) / a
        words = f"the pressure steps cannot be told from none: {short(low)} ml/mmHg or any greater compliance explains them, {steps}"
        return Ratio(value, low, float("inf"), level, n, False, words)
    return Ratio(value, -float("inf"), float("inf"), level, n, False, f"the steps do not say: any compliance explains them, {steps}")


def span_text(low: float, high: float) -> str:
    return f"{short(low)} to {short(high)}"


def short(value: float) -> str:
    """Two significant figures, whole numbers from 10 on."""
    return f"{value:.0f}" if abs(value) >= 10 else f"{value:.2g}"
