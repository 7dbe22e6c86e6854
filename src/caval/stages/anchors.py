"""Beats from the ECG, the arterial and the venous trace together.

Every detector's event is a candidate. What the ECG says of a candidate (size, likeness to the QRS complexes of the minute, quiet around
it) and what the artery says (an upstroke a transit time later, or none) add up to its weight; the sequence of beats is the set of
candidates with the largest sum, found by dynamic programming over the intervals between them. So a burst of diathermy costs no beat while
the artery shows it, and an extrasystole without a pulse stays while the ECG is quiet.

What is learned (the QRS picture, its size, the transit time) is learned on a fixed grid of minutes, each from itself and half a minute on
either side.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import ndimage

from caval import tables
from caval.recording import Signal
from caval.registry import stage
from caval.stages._evidence import ALIKE, MARGIN_S, Evidence, ecg_evidence, no_evidence
from caval.stages._sequence import best_sequence, kinds
from caval.stages._signal import cut, fill, lowpass, nearest
from caval.stages._transit import Transit, learn_transit
from caval.stages._venous import venous_beats

__all__ = ["anchors"]

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

_SAME_S = 0.09
"""Events of two ECG detectors this close are one candidate."""
_DOUBT = -0.5
"""Weight below which an ECG event is no explanation of an upstroke."""
_DICROTIC_S = 0.42
"""A weak upstroke this soon after a strong one is its dicrotic wave: ejection takes 0.25 to 0.35 s (common practice)."""
_REACH_S = 0.10
"""How far an upstroke may lie from R plus the transit time and still belong to it; a weak one may come as much later again."""
_WEAK = 0.35
"""Share of the usual upstroke's slope below which an upstroke is weak: a premature beat's, or a dicrotic wave."""
_EARLY, _VERY_EARLY = 0.8, 0.5
"""Share of the usual interval below which a beat of odd shape, and one of the usual shape, may have no pulse: the ventricle had no time to
fill (our choice)."""
_UNSTEADY = 0.16
"""Median deviation of the intervals, as a share of the usual one: fibrillation has 0.15 or more (a coefficient of variation of 0.22)."""
_T_OVER = 0.42
"""T is over this long after R, times the square root of the interval (Bazett, Heart 1920;7:353, from memory): what is tall then is no T."""
_WIDE = 0.6
"""Energy in the QRS band of a complex as tall as the usual one and twice as wide, over that of the usual one (computed: 0.56)."""
_OFF_S = 0.04
_NOT_FILLED_S = 0.02
"""A weak pulse's transit is this uncertain besides: the ventricle takes longer to open the valve."""


@stage(name="anchors", gives=("beats",), margin_s=MARGIN_S)
def anchors(
    candidates: pd.DataFrame, ecg: Signal | None = None, abp: Signal | None = None, cvp: Signal | None = None, *, transit_s: float = 0.20
) -> pd.DataFrame:
    """Fuse the candidates of single-channel detectors into one sequence of beats.

    Parameters
    ----------
    candidates : DataFrame
        Events of the detectors: ``time_s`` (s), ``detector``; arterial upstrokes are those of the detector ``upstroke``.
    ecg, abp : Signal, optional
        The channels the candidates came from; without an ECG the beats are upstrokes less the transit time.
    cvp : Signal, optional
        The venous trace, a witness where the ECG says nothing and no artery pulses. With neither in the record its waves alone give beats,
        whose R is known no better than to 0.06 s, and may be another's (see `caval.stages._venous`).
    transit_s : float
        Time from R to the foot of the arterial upstroke, seconds, until it can be learned (0.15 to 0.25 s to the radial artery is
        usual; common practice).

    Returns
    -------
    DataFrame
        ``beat, r_time_s, r_sd_s, rr_s, source, confidence, kind``. `source` is ``fused`` when ECG and artery agree, else the one that shows
        the beat; `r_sd_s` is the standard deviation of the R time, from the noise around the complex for ECG beats and from the spread
        of the transit time for arterial ones. `kind` is ``normal``, ``premature`` (earlier than the running interval) or
        ``premature_wide`` (early, and of another shape than the QRS of its minute; only an ECG shows it).
    """
    time = candidates["time_s"].to_numpy(float)
    is_foot = (candidates["detector"] == "upstroke").to_numpy()
    feet = np.unique(time[is_foot]) if abp is not None else np.empty(0)
    of_ecg = ~is_foot & (ecg is not None)
    events, votes = _merge(time[of_ecg], candidates["detector"].to_numpy(object)[of_ecg])
    strength = _strength(abp, feet) if abp is not None else np.empty(0)
    feet, strength = _without_dicrotic(feet, strength)
    strong = feet[strength > _WEAK]
    evidence, of = ecg_evidence(ecg, events, strong) if ecg is not None and len(events) else no_evidence()
    votes = votes[of]
    transit = learn_transit(evidence, strong, transit_s)
    pool = _pool(votes, feet, strength, evidence, transit)
    if cvp is not None and _silent(evidence, strong, cvp).any():
        pool = _with_venous(pool, cvp, evidence, strong, transit)
    if not len(pool.time_s):
        return tables.empty("beats")
    chosen = best_sequence(pool.time_s, pool.weight, *_usual_interval(pool))
    return pd.DataFrame(
        {
            "beat": np.arange(len(chosen)),
            "r_time_s": pool.time_s[chosen],
            "r_sd_s": pool.sd_s[chosen],
            "rr_s": np.nan,
            "source": pool.source[chosen],
            "confidence": 1.0 / (1.0 + np.exp(-1.5 * pool.weight[chosen])),
            "kind": kinds(pool.time_s[chosen], pool.odd[chosen]),
        }
    )


@dataclass(frozen=True, eq=False)
class _Pool:
    """Candidates in time order with their weight (log-odds, roughly); `odd` ones are of another shape than their minute's QRS."""

    time_s: Floats
    weight: Floats
    source: NDArray[np.object_]
    sd_s: Floats
    odd: Bools


def _silent(evidence: Evidence, strong: Floats, cvp: Signal) -> Bools:
    """At each half second of the stretch: whether neither ECG nor artery says anything."""
    at_s = np.arange(cvp.start_s, cvp.stop_s, 0.5)
    return (np.interp(at_s, evidence.quiet_at_s, evidence.quiet_level) < 0.5) & (_awake(strong, at_s) < 0.5)


def _with_venous(pool: _Pool, cvp: Signal, evidence: Evidence, strong: Floats, transit: Transit) -> _Pool:
    """The pool with what the venous trace shows; the ECG and the artery have the say where they say anything."""
    known = np.concatenate([evidence.time_s[evidence.sure], strong - transit.at(strong)[0]])
    known = np.sort(known)
    known = known[np.diff(known, prepend=-np.inf) > _SAME_S]
    venous = venous_beats(cvp, known)
    heard = np.interp(venous.time_s, evidence.quiet_at_s, evidence.quiet_level)
    weight = 2.5 * _ramp(venous.likeness, 0.5, 0.8) - 1.0 - 3.2 * heard - 3.2 * _awake(strong, venous.time_s)
    count = len(weight)
    parts = zip(
        (pool.time_s, pool.weight, pool.source, pool.sd_s, pool.odd),
        (venous.time_s, weight, np.full(count, "cvp", dtype=object), venous.sd_s, np.zeros(count, dtype=bool)),
        strict=True,
    )
    time, weight, source, sd, odd = (np.concatenate(part) for part in parts)
    order = np.argsort(time, kind="stable")
    return _Pool(time[order], weight[order], source[order], sd[order], odd[order])


def _merge(time: Floats, names: NDArray) -> tuple[Floats, Floats]:
    """Events of all ECG detectors as one list; where several coincide the time of ``qrs`` stands.

    Votes, in log-odds: for what another detector saw too, against what it did not.
    """
    own = np.sort(time[names == "qrs"])
    other = np.sort(time[names != "qrs"])
    if not len(own):
        own = other[np.diff(other, prepend=-np.inf) > _SAME_S]
    votes = np.full(len(own), -0.25)
    if len(own) and len(other):
        at = nearest(own, other)
        far = np.abs(own[at] - other) > _SAME_S
        votes[np.unique(at[~far])] = 0.25
        lone = other[far][np.diff(other[far], prepend=-np.inf) > _SAME_S]
        own, votes = np.concatenate([own, lone]), np.concatenate([votes, np.full(len(lone), 0.25)])
        order = np.argsort(own, kind="stable")
        own, votes = own[order], votes[order]
    return own, votes


def _strength(abp: Signal, feet: Floats) -> Floats:
    """Steepest slope of each upstroke over the usual one around it (the running median of the strong ones), shape (n,)."""
    if not len(feet):
        return np.empty(0)
    values, _ = fill(abp.values)
    rate = abp.sampling_rate
    slope = np.gradient(lowpass(values, rate, 12.0)) * rate
    steepest = cut(slope, np.rint(abp.position(feet)).astype(int), max(2, round(0.2 * rate))).max(axis=1)
    strong = ndimage.maximum_filter1d(steepest, 3, mode="nearest")
    usual = ndimage.median_filter(strong, size=min(41, len(strong) | 1), mode="nearest")
    return steepest / np.maximum(usual, 1e-9)


def _without_dicrotic(feet: Floats, strength: Floats) -> tuple[Floats, Floats]:
    """Upstrokes and strengths less the weak ones that closely follow a strong one: dicrotic waves."""
    strong = feet[strength >= _WEAK]
    if not len(strong):
        return feet, strength
    before = np.searchsorted(strong, feet) - 1
    since = np.where(before >= 0, feet - strong[np.maximum(before, 0)], np.inf)
    keep = (strength >= _WEAK) | (since > _DICROTIC_S)
    return feet[keep], strength[keep]


def _pool(votes: Floats, feet: Floats, strength: Floats, evidence: Evidence, transit: Transit) -> _Pool:
    """Every candidate with its weight: ECG events, and upstrokes that no likely ECG event explains, set back by the transit time."""
    events = evidence.time_s
    delay, spread = transit.at(feet)
    spread = np.hypot(spread, _NOT_FILLED_S * (strength < 0.6))
    expected = feet - delay
    weak = strength < _WEAK
    since, usual = _since(events, expected[~weak])
    no_t = np.isfinite(since) & (since * np.sqrt(usual) > _T_OVER)
    evidence = replace(evidence, size=np.where(no_t, np.maximum(evidence.size, _WIDE * evidence.tallness), evidence.size))
    ecg_says = _ecg_weight(votes, evidence)
    pulse = _assign(events, ecg_says, expected[~weak], (_REACH_S, _REACH_S))
    ripple = _assign(events, ecg_says, expected[weak], (0.5 * _REACH_S, 2.0 * _REACH_S))
    # An early beat may have no pulse, one of the ventricle more easily: it contracts out of step. Likeness that is vague says nothing then.
    clear = _ramp(evidence.likeness, 0.8, 0.95)
    early = since < _EARLY - (_EARLY - _VERY_EARLY) * clear
    silence = _awake(feet[~weak], events) * np.where(early, 0.5 + (1.0 - clear) * _shape_weight(evidence), 1.6)
    off_s = np.abs(events - np.append(expected[~weak], 0.0)[pulse])
    artery_says = np.where(pulse >= 0, 2.0 - 8.0 * off_s, np.where(ripple >= 0, 0.6, -silence))
    # Where the ECG says little the upstroke says when: R is the upstroke less the transit time. So it is where a beat on time has a shape
    # of its own and another time than its pulse: the ECG is disturbed.
    disturbed = (evidence.likeness < ALIKE) & (since > _EARLY) & (off_s > _OFF_S)
    trust = np.maximum(evidence.quiet * ~disturbed, _ramp(evidence.likeness, 0.6, 0.85))
    by_foot = (pulse >= 0) & (trust < 0.5)
    events = np.where(by_foot, np.append(expected[~weak], 0.0)[pulse], events)
    sd = np.where(by_foot, np.append(spread[~weak], 0.0)[pulse], np.hypot(evidence.sd_s, 0.03 * (1.0 - trust)))
    source = np.where(by_foot, "abp", np.where((pulse >= 0) | (ripple >= 0), "fused", "ecg")).astype(object)

    explained = np.zeros(len(feet), dtype=bool)
    sure = np.sort(events[ecg_says > _DOUBT])
    if len(sure) and len(feet):
        explained = np.abs(sure[nearest(sure, expected)] - expected) < _SAME_S
    lone, lone_strength = expected[~explained], strength[~explained]
    heard = np.interp(lone, evidence.quiet_at_s, evidence.quiet_level)
    time = np.concatenate([events, lone])
    weight = np.concatenate([ecg_says + artery_says, 2.8 * _ramp(lone_strength, 0.2, 0.6) - 1.0 - 3.2 * heard])
    source = np.concatenate([source, np.full(len(lone), "abp", dtype=object)])
    sd = np.concatenate([sd, spread[~explained]])
    order = np.argsort(time, kind="stable")
    odd = np.concatenate([(evidence.likeness < ALIKE) & (trust >= 0.5) & ~by_foot, np.zeros(len(lone), dtype=bool)])
    return _Pool(time[order], weight[order], source[order], sd[order], odd[order])


def _ecg_weight(votes: Floats, evidence: Evidence) -> Floats:
    """Log-odds of a QRS from the ECG alone: in quiet, size decides and any shape will do; in noise only the minute's shape counts."""
    big = _ramp(evidence.size, 0.25, 0.6) * _ramp(-evidence.size, -10.0, -5.0)
    any_shape = evidence.quiet * (3.6 * big - 2.2) - 2.6 * (1 - evidence.quiet) - 2.0 * (1 - evidence.standing)
    return any_shape + _shape_weight(evidence) + votes


def _shape_weight(evidence: Evidence) -> Floats:
    """What likeness to the minute's QRS adds; more in noise, where there is nothing else to go by."""
    fits = _ramp(evidence.size, 0.3, 0.6) * _ramp(-evidence.size, -3.5, -1.8)
    return np.clip(evidence.likeness, 0.0, 1.0) ** 3 * fits * (1.2 * evidence.quiet + 4.2 * (1 - evidence.quiet))


def _ramp(value: Floats, low: float, high: float) -> Floats:
    return np.clip((value - low) / (high - low), 0.0, 1.0)


def _assign(events: Floats, weight: Floats, expected: Floats, reach_s: tuple[float, float]) -> NDArray[np.int64]:
    """The upstroke that each event has, -1 for none: each upstroke goes to the likeliest and nearest event within `reach_s` after or
    before its expected R.
    """
    has = np.full(len(events), -1)
    first, last = np.searchsorted(events, expected - reach_s[1]), np.searchsorted(events, expected + reach_s[0])
    filled = np.flatnonzero(last > first)
    if len(filled):
        first, last = first[filled], last[filled]
        index = first[:, None] + np.arange((last - first).max())
        inside = index < last[:, None]
        index = np.minimum(index, len(events) - 1)
        worth = np.where(inside, weight[index] - 12.0 * np.abs(events[index] - expected[filled, None]), -np.inf)
        has[first + worth.argmax(axis=1)] = filled
    return has


def _awake(feet: Floats, at_s: Floats) -> Floats:
    """0 to 1: whether the artery shows pulses around a time (at least four upstrokes within 4 s either way)."""
    if not len(feet):
        return np.zeros(len(at_s))
    count = np.searchsorted(feet, at_s + 4.0) - np.searchsorted(feet, at_s - 4.0)
    return np.clip((count - 1) / 3.0, 0.0, 1.0)


def _since(events: Floats, expected: Floats) -> tuple[Floats, Floats]:
    """Time from the beat of the last strong pulse to each event, as a share of the usual interval there, and that (s).

    Infinite and 1 where no pulse says.
    """
    if len(expected) < 4:
        return np.full(len(events), np.inf), np.ones(len(events))
    usual = ndimage.median_filter(np.diff(expected), size=min(15, len(expected) - 1), mode="nearest")
    before = np.searchsorted(expected, events - 0.5 * _SAME_S) - 1
    period = usual[np.clip(before, 0, len(usual) - 1)]
    return np.where(before >= 0, (events - expected[np.maximum(before, 0)]) / period, np.inf), np.where(before >= 0, period, 1.0)


def _usual_interval(pool: _Pool) -> tuple[Floats, Floats]:
    """Running median interval between likely candidates (s), and how steady they are (0 to 1), at every candidate."""
    likely = pool.time_s[pool.weight > 1.0]
    if len(likely) < 4:
        return np.full(len(pool.time_s), 0.85), np.zeros(len(pool.time_s))
    gaps = np.clip(np.diff(likely), 0.25, 2.5)
    size = min(15, len(gaps))
    usual = ndimage.median_filter(gaps, size=size, mode="nearest")
    scatter = ndimage.median_filter(np.abs(gaps / usual - 1.0), size=size, mode="nearest")
    steady = _ramp(-scatter, -_UNSTEADY, -0.5 * _UNSTEADY)
    return np.interp(pool.time_s, likely[1:], usual), np.interp(pool.time_s, likely[1:], steady)
