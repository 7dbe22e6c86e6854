"""The way back: which volumes and compliances could have made the wave that was measured.

A wave of the venous trace is a volume moved into or out of the chamber, seen through the chamber's compliance::

    height (mmHg) = volume (ml) ÷ compliance (ml/mmHg)

One number does not give two. The same 40 ml make 27 mmHg in an atrium of 1.5 ml/mmHg and 4 mmHg in one of 10 ml/mmHg; a tall v alone
is no measure of regurgitation, nor a small one its absence. `explain` lays out every pair that fits, narrows it by whatever else is known,
and says so when the trace alone cannot tell. "The chamber" is the atrium with the great veins that stand open to it, and its compliance is
the one that holds over the few hundred milliseconds of a wave: an effective compliance.

Inference is by likelihood, without a prior: each thing known is a normal reading with its interval, a bound is one with a soft edge, and
ranges are profile-likelihood intervals (-2 log L rises by the χ² quantile with one degree of freedom), so that with the wave's height alone
the 95 % region is exactly the pairs whose quotient lies in the height's own 95 % interval.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import ArrayLike, NDArray

from caval.errors import InputError
from caval.model.compliance import cutoff, normal_quantile, short, span_text

__all__ = ["Challenge", "Explanation", "Interval", "explain", "height_of", "wave_height"]

_Evidence = tuple[Callable[[NDArray[np.float64]], NDArray[np.float64]], str]


@dataclass(frozen=True)
class Interval:
    """A value known to lie in ``[low, high)`` at a level of confidence, 95 % by default: a normal reading centred between the two.

    ``Interval(0, 0)`` is exactly 0.

    Examples
    --------
    >>> Interval(8, 12).sd
    1.02...
    >>> Interval.of(10, 1.5)
    Interval(low=7.06..., high=12.93..., level=0.95)
    """

    low: float
    high: float
    level: float = 0.95

    def __post_init__(self) -> None:
        if not (np.isfinite(self.low) and np.isfinite(self.high) and self.low <= self.high):
            raise InputError(f"interval from {self.low!r} to {self.high!r}: both must be finite and the first not above the second")
        if not 0.5 <= self.level < 1:
            raise InputError(f"level = {self.level!r}: it must be at least 0.5 and below 1")

    @classmethod
    def of(cls, value: float, sd: float, level: float = 0.95) -> Interval:
        """From a value and its standard deviation (standard error)."""
        if not sd >= 0:
            raise InputError(f"sd = {sd!r}: it must be 0 or more")
        half = normal_quantile(level) * sd
        return cls(value - half, value + half, level)

    @property
    def value(self) -> float:
        """The middle."""
        return 0.5 * (self.low + self.high)

    @property
    def sd(self) -> float:
        """Standard deviation of the normal reading."""
        return (self.high - self.low) / (2 * normal_quantile(self.level))

    def minus(self, other: Interval) -> Interval:
        """The difference of two independent readings: ``after.minus(before)``."""
        return Interval.of(self.value - other.value, float(np.hypot(self.sd, other.sd)), self.level)


@dataclass(frozen=True)
class Challenge:
    """A volume given or taken and the pressure change it made.

    Attributes
    ----------
    volume_ml, pressure_mmhg : Interval
    within : {"circulation", "chamber"}
        Where the volume went. A bolus into a vein fills the whole systemic venous bed, of which the chamber is a part: its quotient is
        no less than the chamber's compliance, and bounds it from above. A volume into the chamber itself, too fast to leave it,
        measures it.
    """

    volume_ml: Interval
    pressure_mmhg: Interval
    within: str = "circulation"

    def __post_init__(self) -> None:
        if self.within not in ("circulation", "chamber"):
            raise InputError(f"within = {self.within!r}: it must be 'circulation' or 'chamber'")


@dataclass(frozen=True, eq=False)
class Explanation:
    """The pairs of volume and compliance that explain a wave.

    Attributes
    ----------
    wave : str
        ``v`` or ``a``.
    height_mmhg : Interval
    volume_ml : float64 array, shape (m,)
        Volume moved, rising in equal ratios.
    compliance_ml_per_mmhg : float64 array, shape (n,)
        Effective compliance (at the foot of the wave, with stiffening), rising in equal ratios.
    deviance : float64 array, shape (n, m)
        -2 log likelihood over the best on the grid: 0 at the best, 3.84 at the edge of the 95 % region.
    trace_deviance : float64 array, shape (n, m)
        The same for the trace alone.
    volume_deviance, compliance_deviance : float64 array, shape (m,) and (n,)
        Profiles of `deviance` along either axis: the least over the other, looked for between grid points too.
    volume_range_ml, compliance_range_ml_per_mmhg : (float, float)
        95 % profile intervals; they end at the limits of what is looked at where nothing else bounds them.
    volume_bounds, compliance_bounds : (bool, bool)
        Whether the lower and the upper end come from what is known, and not from the limits of what is looked at.
    known : tuple of str
        What narrowed it, in words.
    misfit : float
        -2 log likelihood at the best pair, before it was taken off; what is known and the trace agree when it is of the order of the number
        of things known.
    agrees : bool
        `misfit` is within the 99 % quantile of χ² for the things known.
    stiffening_per_ml : float
    statement : str
        What can be said, in a sentence or two.
    """

    wave: str
    height_mmhg: Interval
    volume_ml: NDArray[np.float64]
    compliance_ml_per_mmhg: NDArray[np.float64]
    deviance: NDArray[np.float64]
    trace_deviance: NDArray[np.float64]
    volume_deviance: NDArray[np.float64]
    compliance_deviance: NDArray[np.float64]
    volume_range_ml: tuple[float, float]
    compliance_range_ml_per_mmhg: tuple[float, float]
    volume_bounds: tuple[bool, bool]
    compliance_bounds: tuple[bool, bool]
    known: tuple[str, ...]
    misfit: float
    agrees: bool
    stiffening_per_ml: float
    statement: str

    @property
    def is_bounded(self) -> bool:
        """Volume and compliance are both bounded at both ends by what is known."""
        return all((*self.volume_bounds, *self.compliance_bounds))

    @property
    def best(self) -> tuple[float, float]:
        """Volume (ml) and compliance (ml/mmHg) at the best point of the grid; of meaning only where `is_bounded`."""
        row, column = np.unravel_index(int(np.argmin(self.deviance)), self.deviance.shape)
        return float(self.volume_ml[column]), float(self.compliance_ml_per_mmhg[row])

    def inside(self, level: float = 0.95) -> NDArray[np.bool_]:
        """Pairs in the region of that level, shape (n, m)."""
        return self.deviance <= cutoff(level)


def wave_height(volume_ml: ArrayLike, compliance_ml_per_mmhg: ArrayLike, *, stiffening_per_ml: float = 0.0) -> NDArray[np.float64]:
    """Height of the wave that a volume makes, mmHg; arguments broadcast.

    Parameters
    ----------
    volume_ml, compliance_ml_per_mmhg : array
        Volume moved, and compliance at the foot of the wave.
    stiffening_per_ml : float
        k of a wall that stiffens as it fills, ``dP/dV = e^(kV)/C``: the height is then ``(e^(kV) - 1)/(kC)``, V/C for k = 0 (an
        exponential pressure–volume curve, the usual form for diastolic chambers and pericardium).

    Examples
    --------
    >>> wave_height(40, [1.5, 10.0]).round(1)
    array([26.7,  4. ])
    """
    volume, compliance = np.asarray(volume_ml, dtype=np.float64), np.asarray(compliance_ml_per_mmhg, dtype=np.float64)
    if not (compliance > 0).all():
        raise InputError(f"compliance_ml_per_mmhg = {compliance_ml_per_mmhg!r}: it must be above 0 ml/mmHg")
    if not 0 <= stiffening_per_ml <= 0.2:
        raise InputError(f"stiffening_per_ml = {stiffening_per_ml!r}: it must be between 0 and 0.2 per ml")
    if stiffening_per_ml == 0:
        return volume / compliance
    return np.expm1(stiffening_per_ml * volume) / (stiffening_per_ml * compliance)


def height_of(heights_mmhg: ArrayLike, *, level: float = 0.95) -> Interval:
    """The mean height of a wave over beats with its confidence interval (Student's t), mmHg; NaN beats are left out.

    Raises
    ------
    InputError
        Fewer than two beats have a height.
    """
    from scipy.special import stdtrit

    heights = np.asarray(heights_mmhg, dtype=np.float64)
    heights = heights[np.isfinite(heights)]
    if len(heights) < 2:
        raise InputError(f"heights of {len(heights)} beats; an interval needs two or more")
    half = float(stdtrit(len(heights) - 1, 0.5 + 0.5 * level)) * heights.std(ddof=1) / np.sqrt(len(heights))
    return Interval(float(heights.mean() - half), float(heights.mean() + half), level)


def explain(
    height_mmhg: Interval,
    *,
    wave: str = "v",
    volume_ml: Interval | None = None,
    echo_ml: tuple[Interval, Interval] | None = None,
    compliance_ml_per_mmhg: Interval | None = None,
    regurgitant_ml: Interval | None = None,
    stroke_volume_ml: Interval | None = None,
    filling_share: tuple[float, float] = (0.0, 1.0),
    challenge: Challenge | Sequence[Challenge] = (),
    stiffening_per_ml: float = 0.0,
    volumes_ml: tuple[float, float] = (2.0, 200.0),
    compliances_ml_per_mmhg: tuple[float, float] = (0.2, 100.0),
    points: int = 401,
) -> Explanation:
    """Every pair of volume and effective compliance that explains a wave's height, narrowed by what else is known.

    Parameters
    ----------
    height_mmhg : Interval
        Of the wave: v over the x before it, a over its foot (`height_of` gives it from beats).
    wave : {"v", "a"}
    volume_ml : Interval, optional
        The volume moved itself, from whatever source.
    echo_ml : (Interval, Interval), optional
        Chamber volume at the foot and at the top of the wave, by echo: before and after. For ``a`` the volume falls; its size counts.
    compliance_ml_per_mmhg : Interval, optional
    regurgitant_ml : Interval, optional
        Volume that comes back through the valve in systole; ``Interval(0, 0)`` for a tight valve. Wave v only. It is part of what moves,
        so it bounds the volume from below.
    stroke_volume_ml : Interval, optional
        Forward stroke volume. In a steady state as much returns to the atrium each beat; the share `filling_share` of it enters during the
        wave, so with `regurgitant_ml` it bounds the volume of v on both sides:
        ``regurgitant + low·SV ≤ V ≤ regurgitant + high·SV``. Without `regurgitant_ml` only the lower bound holds. Contraction moves at
        most the high share of it for ``a``.
    filling_share : (float, float)
        Least and greatest share of the stroke volume; ``(0, 1)`` claims nothing.
    challenge : Challenge or sequence of Challenge
    stiffening_per_ml : float
        As in `wave_height`; the compliance of the result is then that at the foot of the wave.
    volumes_ml, compliances_ml_per_mmhg : (float, float)
        What is looked at: the grid's limits. They are no evidence; a range that reaches them is said to be open.
    points : int
        Grid points a side.

    Notes
    -----
    Readings are taken as independent, and none as sharper than a standard deviation of half a percent. The regurgitant volume is taken as
    all coming between the foot and the top of the wave.

    Raises
    ------
    InputError
        A wave that is not v or a, a height with nothing above 0, a bound out of order, evidence that does not go with the wave.

    Examples
    --------
    >>> print(explain(Interval(9, 11)).statement)
    The trace alone does not say: volumes of 2 to 200 ml with compliances of 0.2 to 22 ml/mmHg all explain a v wave of 9 to 11 mmHg (within
    the 2 to 200 ml and 0.2 to 100 ml/mmHg looked at).
    """
    _check_question(height_mmhg, wave, regurgitant_ml, filling_share, volumes_ml, compliances_ml_per_mmhg, points)
    challenges = (challenge,) if isinstance(challenge, Challenge) else tuple(challenge)
    on_volume = _about_volume(wave, volume_ml, echo_ml, regurgitant_ml, stroke_volume_ml, filling_share)
    on_compliance = _about_compliance(compliance_ml_per_mmhg, challenges)

    volume, compliance = np.geomspace(*volumes_ml, points), np.geomspace(*compliances_ml_per_mmhg, points)
    trace = _reading(wave_height(volume, compliance[:, None], stiffening_per_ml=stiffening_per_ml), height_mmhg)
    total = trace + _together(on_volume, volume) + _together(on_compliance, compliance)[:, None]
    profiles = _profiles(height_mmhg, on_volume, on_compliance, volumes_ml, compliances_ml_per_mmhg, stiffening_per_ml)
    misfit = min(float(profile.min()) for _, profile, _ in profiles)
    of_trace = _trace_ranges(height_mmhg, volumes_ml, compliances_ml_per_mmhg, stiffening_per_ml)
    (volume_range, volume_bounds), (compliance_range, compliance_bounds) = (_ends(*p) for p in profiles)

    from scipy.special import chdtri

    known = tuple(words for _, words in (*on_volume, *on_compliance))
    agrees = bool(misfit <= chdtri(max(len(known), 1), 0.01))
    statement = _statement(
        wave, height_mmhg, known, volume_range, compliance_range, volume_bounds, compliance_bounds, agrees,
        (volumes_ml, compliances_ml_per_mmhg), stiffening_per_ml > 0,
        adds=not np.allclose(of_trace, (volume_range, compliance_range), rtol=0.02),
    )
    on_grid = [np.interp(np.log(a), np.log(p[0]), p[1] - misfit) for a, p in zip((volume, compliance), profiles, strict=True)]
    return Explanation(
        wave, height_mmhg, volume, compliance, np.maximum(total - misfit, 0.0), trace, on_grid[0], on_grid[1], volume_range,
        compliance_range, volume_bounds, compliance_bounds, known, misfit, agrees, stiffening_per_ml, statement,
    )


def _check_question(
    height: Interval, wave: str, regurgitant: Interval | None, share: tuple[float, float], volumes: tuple[float, float],
    compliances: tuple[float, float], points: int,
) -> None:
    if wave not in ("v", "a"):
        raise InputError(f"wave = {wave!r}: it must be 'v' or 'a'")
    if not (height.high > 0 and height.sd > 0):
        raise InputError(f"height_mmhg = {_text(height)}: it must have some width, and its upper end must be above 0 mmHg")
    if wave == "a" and regurgitant is not None:
        raise InputError("regurgitant_ml goes with wave 'v': in atrial contraction the valve is open")
    if not 0 <= share[0] <= share[1] <= 1:
        raise InputError(f"filling_share = {share!r}: two shares between 0 and 1, the first not above the second")
    for name, (low, high) in (("volumes_ml", volumes), ("compliances_ml_per_mmhg", compliances)):
        if not 0 < low < high < np.inf:
            raise InputError(f"{name} = {(low, high)!r}: two values above 0, the first below the second")
    if not 21 <= points <= 2001:
        raise InputError(f"points = {points!r}: it must be between 21 and 2001")


def _reading(at: NDArray[np.float64], known: Interval) -> NDArray[np.float64]:
    """-2 log L of a normal reading, 0 at its middle."""
    return ((at - known.value) / _width(known)) ** 2


def _width(known: Interval) -> float:
    """Standard deviation of a reading; nothing is taken as sharper than half a percent, which keeps it wider than the lines searched."""
    return max(known.sd, 0.005 * abs(known.value), 1e-6)


def _edge(at: NDArray[np.float64], bound: Interval, *, above: bool) -> NDArray[np.float64]:
    """-2 log of the chance that `at` lies above (or below) a bound that is itself a normal reading."""
    from scipy.special import log_ndtr

    away = (at - bound.value) / max(bound.sd, 1e-3 * max(abs(bound.value), 1.0))
    result: NDArray[np.float64] = -2.0 * log_ndtr(away if above else -away)
    return result


def _about_volume(
    wave: str, volume: Interval | None, echo: tuple[Interval, Interval] | None, regurgitant: Interval | None, stroke: Interval | None,
    share: tuple[float, float],
) -> list[_Evidence]:
    """What is known of the volume moved: -2 log L of volumes in ml, and the words for it."""
    found: list[_Evidence] = []
    if volume is not None:
        found.append((partial(_reading, known=volume), f"volume moved {_text(volume)} ml"))
    if echo is not None:
        before, after = echo
        moved = after.minus(before) if wave == "v" else before.minus(after)
        found.append((partial(_reading, known=moved), f"echo volumes {_text(before)} and {_text(after)} ml"))
    named = (("regurgitant volume", regurgitant), ("stroke volume", stroke))
    words = ", ".join(f"{name} {_text(one)} ml" for name, one in named if one is not None)
    least, most = _sum(regurgitant, stroke, share[0]), _sum(regurgitant, stroke, share[1])
    if wave == "a" and stroke is not None:
        found.append((partial(_edge, bound=most, above=False), words))
    elif regurgitant is not None and stroke is not None:
        found.append((lambda v: _edge(v, least, above=True) + _edge(v, most, above=False), words))
    elif regurgitant is not None or (stroke is not None and share[0] > 0):
        found.append((partial(_edge, bound=least, above=True), words))
    return found


def _about_compliance(compliance: Interval | None, challenges: Sequence[Challenge]) -> list[_Evidence]:
    """What is known of the compliance: -2 log L of compliances in ml/mmHg, and the words for it."""
    found: list[_Evidence] = []
    if compliance is not None:
        found.append((partial(_reading, known=compliance), f"compliance {_text(compliance)} ml/mmHg"))
    for one in challenges:
        where = "the circulation" if one.within == "circulation" else "the chamber"
        words = f"{_text(one.volume_ml)} ml into {where} for {_text(one.pressure_mmhg)} mmHg"
        found.append((partial(_challenge, challenge=one), words))
    return found


def _together(evidence: Sequence[_Evidence], at: NDArray[np.float64]) -> NDArray[np.float64]:
    return sum((deviance(at) for deviance, _ in evidence), np.zeros_like(at))


def _sum(one: Interval | None, other: Interval | None, share: float) -> Interval:
    """Reading of ``one + share·other``, what is missing being 0."""
    value = (one.value if one else 0.0) + share * (other.value if other else 0.0)
    return Interval.of(value, float(np.hypot(one.sd if one else 0.0, share * other.sd if other else 0.0)))


def _challenge(compliance: NDArray[np.float64], challenge: Challenge) -> NDArray[np.float64]:
    """Fieller's quantity ``(ΔV - C ΔP)/sd``: its square measures C, its sign says on which side of the quotient C lies."""
    volume, pressure = challenge.volume_ml, challenge.pressure_mmhg
    away = (compliance * pressure.value - volume.value) / np.maximum(np.hypot(volume.sd, compliance * pressure.sd), 1e-9)
    if challenge.within == "chamber":
        return away**2
    from scipy.special import log_ndtr

    result: NDArray[np.float64] = -2.0 * log_ndtr(-away)
    return result


def _volume_of(height: NDArray[np.float64] | float, compliance: NDArray[np.float64] | float, k: float) -> NDArray[np.float64]:
    """The volume that makes a wave of that height in that compliance, ml; k is the stiffening."""
    return np.asarray(np.log1p(k * compliance * height) / k if k else compliance * height)


def _compliance_of(height: NDArray[np.float64] | float, volume: NDArray[np.float64] | float, k: float) -> NDArray[np.float64]:
    """The compliance in which a volume makes a wave of that height, ml/mmHg."""
    return np.asarray(np.expm1(k * volume) / (k * height) if k else volume / height)


def _trace_ranges(
    height: Interval, volumes: tuple[float, float], compliances: tuple[float, float], k: float
) -> tuple[tuple[float, float], tuple[float, float]]:
    """Volumes and compliances that the height alone leaves of what is looked at, at 95 %."""
    half = _width(height) * normal_quantile(0.95)
    low, high = max(height.value - half, 1e-9), height.value + half
    return (
        (max(volumes[0], float(_volume_of(low, compliances[0], k))), min(volumes[1], float(_volume_of(high, compliances[1], k)))),
        (max(compliances[0], float(_compliance_of(high, volumes[0], k))), min(compliances[1], float(_compliance_of(low, volumes[1], k)))),
    )


def _profiles(
    height: Interval, on_volume: Sequence[_Evidence], on_compliance: Sequence[_Evidence], volumes: tuple[float, float],
    compliances: tuple[float, float], k: float,
) -> list[tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]]:
    """Profile of -2 log L along volume and along compliance, each ``(axis, profile, profile without limits on the other)``.

    Along either axis the other is found from the height: evidence is of one or the other, so the best height is looked for on a fine line,
    and no ridge falls between the points of a grid.
    """
    spread = np.linspace(-6, 6, 145) * _width(height)
    heights = (height.value + spread)[height.value + spread > 0]
    cost = _reading(heights, height)
    volume, compliance = np.geomspace(*volumes, 1501)[:, None], np.geomspace(*compliances, 1501)[:, None]
    of_volume, of_compliance = _compliance_of(heights, volume, k), _volume_of(heights, compliance, k)
    along = []
    for axis, here, there, other, limits in (
        (volume, on_volume, on_compliance, of_volume, compliances), (compliance, on_compliance, on_volume, of_compliance, volumes),
    ):
        inside = (other >= limits[0]) & (other <= limits[1])
        pairs = cost + _together(there, other)
        alone = _together(here, axis[:, 0])
        along.append((axis[:, 0], alone + np.where(inside, pairs, np.inf).min(axis=1), alone + pairs.min(axis=1)))
    return along


def _ends(
    axis: NDArray[np.float64], profile: NDArray[np.float64], free: NDArray[np.float64]
) -> tuple[tuple[float, float], tuple[bool, bool]]:
    """Ends of the 95 % profile interval, and whether each is there for another reason than the limits of what is looked at."""
    limit = float(profile.min()) + cutoff(0.95)
    anywhere = np.flatnonzero(free <= float(free.min()) + cutoff(0.95))
    inside = np.flatnonzero(profile <= limit)
    log, ends = np.log(axis), []
    for here, out in ((inside[0], inside[0] - 1), (inside[-1], inside[-1] + 1)):
        if not 0 <= out < len(axis) or np.isinf(profile[out]):
            ends.append(float(axis[here]))
            continue
        share = (limit - profile[here]) / (profile[out] - profile[here])
        ends.append(float(np.exp(log[here] + (log[out] - log[here]) * share)))
    return (ends[0], ends[1]), (bool(anywhere[0] > 0), bool(anywhere[-1] < len(axis) - 1))


def _statement(
    wave: str, height: Interval, known: Sequence[str], volume: tuple[float, float], compliance: tuple[float, float],
    volume_bounds: tuple[bool, bool], compliance_bounds: tuple[bool, bool], agrees: bool,
    asked: tuple[tuple[float, float], tuple[float, float]], stiffens: bool, *, adds: bool,
) -> str:
    what = f"{'an' if wave == 'a' else 'a'} {wave} wave of {_text(height)} mmHg"
    pairs = f"volumes of {span_text(*volume)} ml with compliances of {span_text(*compliance)} ml/mmHg"
    at_foot = ", compliance being that at the foot of the wave" if stiffens else ""
    looked = f" (within the {span_text(*asked[0])} ml and {span_text(*asked[1])} ml/mmHg looked at{at_foot})"
    if not known:
        return f"The trace alone does not say: {pairs} all explain {what}{looked}."
    given = "; ".join(known)
    if not agrees:
        return f"What is known does not fit together with {what}: {given}. One of the readings, or the model, is wrong."
    if not adds:
        return f"Neither the trace nor {given} says: {pairs} all explain {what}{looked}."
    if all((*volume_bounds, *compliance_bounds)):
        narrow = volume[1] / volume[0] < 3 and compliance[1] / compliance[0] < 3
        return f"With {given}: {pairs} explain {what}{'' if narrow else '; that is a wide range, and says little about either'}."
    open_ends = []
    for side, volume_bounded, compliance_bounded in zip(("below", "above"), volume_bounds, compliance_bounds, strict=True):
        if not (volume_bounded and compliance_bounded):
            name = "the compliance" if volume_bounded else "the volume" if compliance_bounded else "either"
            open_ends.append(f"{name} from {side}")
    return f"With {given}: {pairs} explain {what}; nothing known bounds {' or '.join(open_ends)}{looked}."


def _text(known: Interval) -> str:
    return short(known.low) if known.low == known.high else span_text(known.low, known.high)
