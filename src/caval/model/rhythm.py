"""Rhythms: when the atria and the ventricles fire.

A rhythm is two lists of instants, one of atrial and one of ventricular activations, and what joins them::

    sinus            P─────R        P─────R        P─────R           every P has its R, pr_s later
    complete block   P────P────P────P────P────P────P────P            P marches through
                         R              R              R             an escape rhythm of its own
    junctional             R·P            R·P            R·P         the atria are reached backwards, in or after the QRS
    fibrillation         R      R   R          R     R    R          no P; irregular R
    premature        P─────R   V P          P─────R                  the P after V finds the node closed: the pause compensates

Beats of sinus rhythm are placed by integral pulse frequency modulation: the node fires whenever the integral of its rate passes a
whole number (Hyndman and Mohn 1973, from memory), the rate moving with the breath and with slow waves around 0.1 Hz. In
fibrillation an interval is a refractory time plus a waiting time, which gives the skewed, uncorrelated intervals of a node under random
bombardment (the idea of Cohen 1983 and Corino 2011, from memory; the gamma law is our choice). Every stream of random numbers is drawn in
the order of time, so a longer record with the same seed begins with the same beats.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields, replace
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from caval.errors import InputError

__all__ = ["KINDS", "OUTSIDE", "Rhythm", "RhythmKind", "Stretch", "rhythm", "schedule"]

OUTSIDE = -2
"""In `Rhythm.p_conducted`: conducted to a ventricular activation that lies after the end."""


@dataclass(frozen=True)
class RhythmKind:
    """A kind of rhythm: its WFDB rhythm string, usual rates (1/min) and PR (s), and what it is."""

    key: str
    wfdb: str
    heart_rate: float
    atrial_rate: float
    pr_s: float
    meaning: str


KINDS: dict[str, RhythmKind] = {
    k.key: k
    for k in (
        RhythmKind("sinus", "(N", 70, 70, 0.16, "sinus rhythm"),
        RhythmKind("tachycardia", "(N", 140, 140, 0.12, "sinus tachycardia, 100 to 180/min"),
        RhythmKind("first_degree_block", "(BI", 70, 70, 0.30, "sinus rhythm with a long PR"),
        RhythmKind("complete_block", "(B3", 38, 80, 0.16, "atria in sinus rhythm, ventricles in an escape rhythm, nothing conducted"),
        RhythmKind("fibrillation", "(AFIB", 95, 0, 0.0, "atrial fibrillation: no P, irregular R"),
        RhythmKind("junctional", "(NOD", 50, 50, 0.0, "junctional rhythm, atria activated backwards"),
        RhythmKind("paced", "(P", 70, 78, 0.16, "ventricular pacing at a fixed rate, atria in sinus rhythm, nothing conducted"),
        RhythmKind("ventricular_premature", "(N", 70, 70, 0.16, "sinus rhythm with ventricular premature beats and compensatory pauses"),
        RhythmKind("atrial_premature", "(N", 70, 70, 0.16, "sinus rhythm with atrial premature beats that reset the node"),
    )
}
"""The rhythms there are. ``(N``, ``(AFIB``, ``(NOD`` and ``(P`` are rhythm strings of the MIT-BIH Arrhythmia Database, ``(BI`` is that of
the MIT-BIH Malignant Ventricular Arrhythmia Database; ``(B3`` for complete block is that of the European ST-T database (from memory)."""


@dataclass(frozen=True)
class Stretch:
    """A stretch of one rhythm, from `onset_s` to the next stretch or the end: its kind (a key of `KINDS`) and WFDB rhythm string."""

    onset_s: float
    kind: str
    wfdb: str


@dataclass(frozen=True, eq=False)
class Rhythm:
    """Activations of a record, all in ``[0, duration_s)`` and sorted.

    Attributes
    ----------
    p_times_s : float64 array, shape (n_p,)
        Every atrial activation (onset of P), conducted or not; none in fibrillation.
    r_times_s : float64 array, shape (n_r,)
        Every ventricular activation, at the peak of R.
    p_kind : str array, shape (n_p,)
        ``sinus``, ``premature`` or ``retrograde``.
    r_kind : str array, shape (n_r,)
        ``normal``, ``premature`` (ventricular, wide), ``paced``, ``escape``, ``junctional``, ``fibrillation`` or ``atrial_premature``
        (narrow, conducted from a premature P).
    p_conducted : int64 array, shape (n_p,)
        Index of the R that this P gave rise to; -1 where it gave rise to none, `OUTSIDE` (-2) where its R lies after the end.
    stretches : tuple of Stretch
        Where each rhythm begins.
    duration_s : float
    """

    p_times_s: NDArray[np.float64]
    r_times_s: NDArray[np.float64]
    p_kind: NDArray[np.str_]
    r_kind: NDArray[np.str_]
    p_conducted: NDArray[np.int64]
    stretches: tuple[Stretch, ...]
    duration_s: float

    @property
    def rr_s(self) -> NDArray[np.float64]:
        """Interval before each R, seconds, shape (n_r,); NaN for the first."""
        return np.diff(self.r_times_s, prepend=np.nan)

    @property
    def name(self) -> str:
        """The kinds in order: ``sinus, fibrillation``."""
        return ", ".join(s.kind for s in self.stretches)

    def kind_at(self, time_s: ArrayLike) -> NDArray[np.str_]:
        """Kind of rhythm at times in seconds, same shape."""
        place = np.searchsorted([s.onset_s for s in self.stretches], np.asarray(time_s, float), side="right") - 1
        return np.array([s.kind for s in self.stretches])[np.maximum(place, 0)]

    def spans_of(self, kind: str) -> NDArray[np.float64]:
        """Stretches of a kind as rows ``[start, stop)`` in seconds, shape (k, 2)."""
        stops = [s.onset_s for s in self.stretches[1:]] + [self.duration_s]
        found = [(s.onset_s, stop) for s, stop in zip(self.stretches, stops, strict=True) if s.kind == kind]
        return np.array(found, dtype=np.float64).reshape(-1, 2)

    def cut(self, start_s: float, stop_s: float | None = None) -> Rhythm:
        """The part in ``[start_s, stop_s)``, on a clock that starts at `start_s`: how a run-in is taken off.

        Raises
        ------
        InputError
            A part that is empty or not inside the record.
        """
        stop = self.duration_s if stop_s is None else stop_s
        if not 0 <= start_s < stop <= self.duration_s:
            raise InputError(f"part from {start_s!r} to {stop!r} s; it must be of some length and lie inside 0 to {self.duration_s:g} s")
        r = (self.r_times_s >= start_s) & (self.r_times_s < stop)
        p = (self.p_times_s >= start_s) & (self.p_times_s < stop)
        new_place = np.append(np.where(r, np.cumsum(r) - 1, OUTSIDE), [OUTSIDE, -1])  # the last two are reached by -2 and -1
        stretches = [replace(s, onset_s=max(s.onset_s - start_s, 0.0)) for s in self.stretches if s.onset_s < stop]
        while len(stretches) > 1 and stretches[1].onset_s <= 0:
            stretches.pop(0)
        return Rhythm(
            self.p_times_s[p] - start_s, self.r_times_s[r] - start_s, self.p_kind[p], self.r_kind[r],
            new_place[self.p_conducted[p]].astype(np.int64), tuple(stretches), stop - start_s,
        )


@dataclass(frozen=True)
class _Settings:
    """The options of `rhythm`, None where the kind decides."""

    heart_rate: float | None = None
    atrial_rate: float | None = None
    pr_s: float | None = None
    variability: float = 0.02
    respiratory: float = 0.04
    breath_rate: float = 15.0
    inspiration_s: float = 0.0
    irregularity: float = 0.22
    retrograde_s: float = 0.08
    premature_share: float = 0.12
    coupling: float = 0.58


_RANGES: dict[str, tuple[float, float]] = {
    "heart_rate": (20.0, 220.0), "atrial_rate": (20.0, 220.0), "pr_s": (0.06, 0.50), "variability": (0.0, 0.15),
    "respiratory": (0.0, 0.30), "breath_rate": (2.0, 80.0), "inspiration_s": (-60.0, 60.0), "irregularity": (0.05, 0.40),
    "retrograde_s": (-0.12, 0.25), "premature_share": (0.0, 0.4), "coupling": (0.45, 0.85),
}
_UNITS = {"heart_rate": "/min", "atrial_rate": "/min", "breath_rate": "/min", "pr_s": " s", "inspiration_s": " s", "retrograde_s": " s"}
_REFRACTORY_S = 0.25  # no two ventricular activations closer than this where one rhythm takes over from another
_RATE_STEP_S = 0.02


def rhythm(
    kind: str,
    duration_s: float,
    *,
    heart_rate: float | None = None,
    atrial_rate: float | None = None,
    pr_s: float | None = None,
    variability: float = 0.02,
    respiratory: float = 0.04,
    breath_rate: float = 15.0,
    inspiration_s: float = 0.0,
    irregularity: float = 0.22,
    retrograde_s: float = 0.08,
    premature_share: float = 0.12,
    coupling: float = 0.58,
    seed: int = 1,
) -> Rhythm:
    """Atrial and ventricular activations of one rhythm.

    Parameters
    ----------
    kind : str
        A key of `KINDS`.
    duration_s : float
        Seconds.
    heart_rate : float, optional
        Mean rate of the ventricles, 1/min, 20 to 220 (``tachycardia``: 100 to 180); usual for the kind by default (sinus 70).
    atrial_rate : float, optional
        Mean rate of the atria where they go their own way (``complete_block``, ``paced``), 1/min.
    pr_s : float, optional
        From atrial activation to the peak of R, seconds; 0.16 by default, 0.30 in first-degree block.
    variability : float
        Random part of the variability: standard deviation of the interval over its mean. Half of its variance is white, half slow waves
        of 0.04 to 0.15 Hz. A tenth of it applies to escape and junctional rhythms, none to a pacemaker.
    respiratory : float
        How much the sinus node speeds up in the middle of inspiration, as a share of its rate.
    breath_rate, inspiration_s : float
        Breaths a minute, and a time at which an inspiration begins.
    irregularity : float
        Fibrillation: standard deviation of the interval over its mean.
    retrograde_s : float
        Junctional: from R to the activation of the atria, seconds; around 0 it is hidden in the QRS, negative is before it.
    premature_share : float
        Share of the beats that are premature, in the two kinds that have them.
    coupling : float
        Interval of a premature beat to the beat before, as a share of the usual interval.
    seed : int
        The same seed gives the same rhythm, to the bit.

    Raises
    ------
    InputError
        An unknown kind; a value outside its range, with the range; a PR too long for the rate.

    Examples
    --------
    >>> beats = rhythm("complete_block", 60, heart_rate=40, atrial_rate=80)
    >>> len(beats.r_times_s), len(beats.p_times_s), int(beats.p_conducted.max())
    (40, 80, -1)
    """
    settings = _Settings(
        heart_rate, atrial_rate, pr_s, variability, respiratory, breath_rate, inspiration_s, irregularity, retrograde_s, premature_share,
        coupling,
    )
    return _join([(0.0, kind, settings)], duration_s, seed)


def schedule(parts: Sequence[Mapping[str, Any]], duration_s: float, *, seed: int = 1) -> Rhythm:
    """One rhythm after another in one record.

    Parameters
    ----------
    parts : sequence of mapping
        ``{"onset_s": 60.0, "kind": "fibrillation", "heart_rate": 110}``: where it begins, its kind and options of `rhythm`. The first
        begins at 0, and onsets rise. An impulse already on its way when a rhythm ends still reaches the ventricles.
    duration_s, seed
        As in `rhythm`.

    Raises
    ------
    InputError
        As in `rhythm`; an unknown option; onsets that do not start at 0 or do not rise.

    Examples
    --------
    >>> both = schedule([{"onset_s": 0, "kind": "sinus"}, {"onset_s": 30, "kind": "fibrillation"}], 60)
    >>> both.name, bool(both.p_times_s.max() < 30)
    ('sinus, fibrillation', True)
    """
    known = [f.name for f in fields(_Settings)]
    plan = []
    for part in parts:
        unknown = set(part) - {"onset_s", "kind", *known}
        if unknown or "kind" not in part:
            wrong = f"unknown option {sorted(unknown)[0]!r}" if unknown else "no kind"
            raise InputError(f"part of a schedule of rhythms: {wrong}; there are: onset_s, kind, {', '.join(known)}")
        options = {k: v for k, v in part.items() if k in known}
        plan.append((float(part.get("onset_s", 0.0)), str(part["kind"]), _Settings(**options)))
    onsets = [onset for onset, _, _ in plan]
    if not plan or onsets[0] != 0 or any(b <= a for a, b in pairwise(onsets)) or onsets[-1] >= duration_s:
        raise InputError(f"onsets of a schedule of rhythms {onsets} s: the first must be 0 and they must rise, below {duration_s:g} s")
    return _join(plan, duration_s, seed)


@dataclass(frozen=True)
class _Beats:
    """Activations of a stretch before they are put in order; `to` is the index of the R a P leads to, -1 for none."""

    p: NDArray[np.float64]
    r: NDArray[np.float64]
    p_kind: NDArray[np.str_]
    r_kind: NDArray[np.str_]
    to: NDArray[np.int64]


def _join(plan: Sequence[tuple[float, str, _Settings]], duration_s: float, seed: int) -> Rhythm:
    if not (np.isfinite(duration_s) and duration_s > 0):
        raise InputError(f"duration_s = {duration_s!r}: it must be above 0 s")
    stops = [onset for onset, _, _ in plan[1:]] + [duration_s]
    p, r, p_kind, r_kind, to, stretches = [], [], [], [], [], []
    last_r, placed = -np.inf, 0
    for number, ((onset, kind, settings), stop) in enumerate(zip(plan, stops, strict=True)):
        chosen, settings = _checked(kind, settings)
        rng = np.random.default_rng([seed, number])
        beats = _MAKERS[kind](onset, stop - onset, settings, rng)
        late = (beats.r >= stop) & np.isin(np.arange(len(beats.r)), beats.to[beats.p < stop])
        orphan = np.zeros(len(beats.r), dtype=bool)  # its P would belong to the rhythm before
        orphan[beats.to[(beats.p < onset) & (beats.to >= 0)]] = number > 0
        keep_r = (beats.r >= onset) & ((beats.r < stop) | late) & (beats.r > last_r + _REFRACTORY_S) & ~orphan
        keep_p = (beats.p >= onset) & (beats.p < stop)
        place = np.append(np.where(keep_r, np.cumsum(keep_r) - 1 + placed, -1), -1)
        p.append(beats.p[keep_p])
        p_kind.append(beats.p_kind[keep_p])
        to.append(place[beats.to[keep_p]])
        r.append(beats.r[keep_r])
        r_kind.append(beats.r_kind[keep_r])
        placed += int(keep_r.sum())
        last_r = max(last_r, float(beats.r[keep_r].max(initial=-np.inf)))
        stretches.append(Stretch(onset, kind, chosen.wfdb))
    r_all, to_all = np.concatenate(r), np.concatenate(to)
    inside = r_all < duration_s  # what comes after the end is always last
    to_all = np.where(to_all >= inside.sum(), OUTSIDE, to_all)
    return Rhythm(
        np.concatenate(p), r_all[inside], np.concatenate(p_kind).astype(np.str_), np.concatenate(r_kind).astype(np.str_)[inside],
        to_all.astype(np.int64), tuple(stretches), float(duration_s),
    )


def _checked(kind: str, settings: _Settings) -> tuple[RhythmKind, _Settings]:
    if kind not in KINDS:
        raise InputError(f"no rhythm {kind!r}; rhythms are: {', '.join(KINDS)}")
    chosen = KINDS[kind]
    heart_rate = chosen.heart_rate if settings.heart_rate is None else settings.heart_rate
    filled = replace(
        settings,
        heart_rate=heart_rate,
        atrial_rate=(chosen.atrial_rate or heart_rate) if settings.atrial_rate is None else settings.atrial_rate,
        pr_s=(chosen.pr_s or 0.16) if settings.pr_s is None else settings.pr_s,
    )
    for name, (low, high) in _RANGES.items():
        value = getattr(filled, name)
        if kind == "tachycardia" and name == "heart_rate":
            low, high = 100.0, 180.0
        if not isinstance(value, int | float) or not low <= value <= high:
            raise InputError(f"{name} = {value!r}: it must be between {low:g} and {high:g}{_UNITS.get(name, '')} in rhythm {kind!r}")
    conducts = kind in ("sinus", "tachycardia", "first_degree_block", "ventricular_premature", "atrial_premature")
    longest = 0.75 * 60.0 / heart_rate
    if conducts and filled.pr_s is not None and filled.pr_s > longest:
        raise InputError(f"pr_s = {filled.pr_s!r}: at {heart_rate:g}/min it must be between 0.06 and {longest:.3f} s, 3/4 of the interval")
    return chosen, filled


# ---------------------------------------------------------------------------------------------------------------- pacemakers


def _node(onset: float, length_s: float, rate: float, settings: _Settings, rng: np.random.Generator) -> NDArray[np.float64]:
    """Firings of the sinus node over the stretch and two intervals either side, seconds of the record, sorted.

    Integral pulse frequency modulation, with jitter of the threshold.
    """
    phases, jitter, first = rng.spawn(3)
    before = 3 * 60.0 / rate
    time = np.arange(0.0, length_s + 2 * before, _RATE_STEP_S) - before
    slow_hz = np.linspace(0.04, 0.15, 9)
    phase = phases.uniform(0, 2 * np.pi, len(slow_hz))
    period_s = 60.0 / rate
    # A rate wave of amplitude m gives intervals of standard deviation m/√2, less what an interval averages away (sinc).
    slow = np.zeros_like(time)
    for hz, shift in zip(slow_hz, phase, strict=True):
        slow += np.cos(2 * np.pi * hz * time + shift) / np.sinc(hz * period_s)
    slow *= settings.variability * np.sqrt(1 / len(slow_hz))  # nine waves together hold half of the variance
    breath = np.sin(2 * np.pi * settings.breath_rate / 60.0 * (time + onset - settings.inspiration_s))
    speed = rate / 60.0 * np.clip(1.0 + settings.respiratory * breath + slow, 0.3, 2.0)
    turned = np.concatenate([[0.0], np.cumsum(0.5 * (speed[1:] + speed[:-1])) * _RATE_STEP_S]) + first.uniform()
    count = np.arange(1, int(turned[-1]) + 1, dtype=np.float64)
    # Threshold jitter e gives intervals the variance 2e², which is to be half of variability².
    threshold = count + np.clip(0.5 * settings.variability * jitter.standard_normal(len(count)), -0.3, 0.3)
    return onset + np.interp(threshold[threshold < turned[-1]], turned, time)


def _clockwork(onset: float, length_s: float, rate: float, variability: float, rng: np.random.Generator) -> NDArray[np.float64]:
    """Activations of a focus or a pacemaker at a nearly fixed rate over the stretch and an interval after it."""
    period_s = 60.0 / rate
    first = onset + period_s * rng.uniform(0.05, 0.95)
    number = int(1.2 * length_s / period_s) + 4
    interval = period_s * (1 + np.clip(variability * rng.standard_normal(number), -0.2, 0.2))
    return first + np.concatenate([[0.0], np.cumsum(interval)])


def _all(kind: str, like: NDArray) -> NDArray[np.str_]:
    return np.full(len(like), kind, dtype="U16")


def _sinus(onset: float, length_s: float, s: _Settings, rng: np.random.Generator) -> _Beats:
    p = _node(onset, length_s, _need(s.heart_rate), s, rng)
    return _Beats(p, p + _need(s.pr_s), _all("sinus", p), _all("normal", p), np.arange(len(p)))


def _complete_block(onset: float, length_s: float, s: _Settings, rng: np.random.Generator) -> _Beats:
    p = _node(onset, length_s, _need(s.atrial_rate), s, rng)
    r = _clockwork(onset, length_s, _need(s.heart_rate), 0.1 * s.variability, rng)
    return _Beats(p, r, _all("sinus", p), _all("escape", r), np.full(len(p), -1))


def _paced(onset: float, length_s: float, s: _Settings, rng: np.random.Generator) -> _Beats:
    p = _node(onset, length_s, _need(s.atrial_rate), s, rng)
    r = _clockwork(onset, length_s, _need(s.heart_rate), 0.0, rng)
    return _Beats(p, r, _all("sinus", p), _all("paced", r), np.full(len(p), -1))


def _junctional(onset: float, length_s: float, s: _Settings, rng: np.random.Generator) -> _Beats:
    r = _clockwork(onset, length_s, _need(s.heart_rate), 0.1 * s.variability, rng)
    p = r + s.retrograde_s
    return _Beats(p, r, _all("retrograde", p), _all("junctional", r), np.full(len(p), -1))


def _fibrillation(onset: float, length_s: float, s: _Settings, rng: np.random.Generator) -> _Beats:
    mean_s = 60.0 / _need(s.heart_rate)
    refractory = 0.45  # of the mean interval: the shortest interval there is
    shape = ((1 - refractory) / s.irregularity) ** 2
    number = int(1.5 * length_s / mean_s) + 10
    interval = mean_s * (refractory + (1 - refractory) / shape * rng.gamma(shape, size=number))
    r = onset + np.cumsum(interval) - 0.5 * mean_s
    none = np.empty(0)
    return _Beats(none, r, _all("", none), _all("fibrillation", r), none.astype(np.int64))


def _ventricular_premature(onset: float, length_s: float, s: _Settings, rng: np.random.Generator) -> _Beats:
    """A beat of the ventricle stands in for the next conducted one; the sinus node goes on undisturbed, so the pause compensates."""
    choice, place = rng.spawn(2)
    sinus = _sinus(onset, length_s, s, rng)
    early = _chosen(len(sinus.r), s.premature_share, choice)
    r, kind = sinus.r.copy(), sinus.r_kind.copy()
    before = np.flatnonzero(early) - 1
    coupling = s.coupling * (1 + 0.04 * np.clip(place.standard_normal(len(r)), -2, 2))[before + 1]
    r[before + 1] = r[before] + coupling * (r[before + 1] - r[before])
    kind[early] = "premature"
    return _Beats(sinus.p, r, sinus.p_kind, kind, np.where(early, -1, sinus.to))


def _atrial_premature(onset: float, length_s: float, s: _Settings, rng: np.random.Generator) -> _Beats:
    """An early P resets the node: the next one comes a little more than a usual interval later, and the pause does not compensate."""
    choice, _ = rng.spawn(2)
    sinus = _sinus(onset, 1.25 * length_s, s, rng)
    early = _chosen(len(sinus.p), s.premature_share, choice)
    interval = np.diff(sinus.p)
    interval[early[1:]] *= s.coupling
    interval[early[:-1]] *= 1.08
    p = sinus.p[0] + np.concatenate([[0.0], np.cumsum(interval)])
    p_kind, r_kind = _all("sinus", p), _all("normal", p)
    p_kind[early], r_kind[early] = "premature", "atrial_premature"
    return _Beats(p, p + _need(s.pr_s), p_kind, r_kind, sinus.to)


def _chosen(number: int, share: float, rng: np.random.Generator) -> NDArray[np.bool_]:
    """Which beats are early: the share of all, never the first and never two in a row."""
    drawn = rng.uniform(size=number)
    early = np.zeros(number, dtype=bool)
    chance = share / (1 - share) if share < 0.5 else 1.0  # a beat after an early one is not asked
    for i in range(1, number):
        early[i] = not early[i - 1] and drawn[i] < chance
    return early


def _need(value: float | None) -> float:
    assert value is not None  # filled in by _checked
    return value


_MAKERS = {
    "sinus": _sinus, "tachycardia": _sinus, "first_degree_block": _sinus, "complete_block": _complete_block, "fibrillation": _fibrillation,
    "junctional": _junctional, "paced": _paced, "ventricular_premature": _ventricular_premature, "atrial_premature": _atrial_premature,
}
