"""A closed-loop circulation with four time-varying chambers, whose right-atrial pressure has its waves from mechanics.

::

    RA ─tricuspid─ RV ─pulmonary valve─ pulmonary arteries ─ pulmonary veins ─ LA ─mitral─ LV ─aortic valve─ arteries
    │                                                                                                         │
    ├─ superior vena cava ─── upper-body veins ◀──────────────────────────────────────────────────────────────┤
    └─ inferior vena cava ─── abdominal veins ── kidneys, splanchnic, legs ◀──────────────────────────────────┘

The a wave is the atrium's own elastance; c the bulge of the closed tricuspid leaflets as the ventricle's pressure rises; x the room that
the valve ring gives the atrium as it descends with ejection; v venous return against the closed valve, and the ring's recoil as the
long-axis fibres let go; y the emptying when the valve opens.

The integrator is `caval.model.loop`, activation `caval.model.heart`, breathing and infusions `caval.model.breathing`.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from caval.errors import InputError
from caval.model import breathing as outside
from caval.model.breathing import Breathing, Infusion
from caval.model.heart import Activation
from caval.model.loop import OUT, RHO, VESSELS, integrate
from caval.model.parameters import Chamber, Circulation, Valve, Vessel

__all__ = ["Breathing", "Haemodynamics", "Infusion", "run"]

Floats = NDArray[np.float64]

_STEP_S = 0.0005
_BLOCK_S = 60.0  # activation is made for a minute at a time, so that memory holds the result and little else
_LEAK_CM2 = 1e-4  # a closed valve passes 0.05 ml/s at 100 mmHg


@dataclass(frozen=True, eq=False)
class Haemodynamics:
    """What the model did, sampled at `rate` Hz from 0 s: pressures (mmHg), volumes (ml), flows (ml/s), by name."""

    rate: float
    time_s: Floats
    pressures: dict[str, Floats]
    volumes: dict[str, Floats]
    flows: dict[str, Floats]
    openings: dict[str, Floats]
    ra_elastance: Floats
    blood_ml: Floats

    @property
    def cardiac_output_l_min(self) -> float:
        """Mean aortic flow."""
        return float(self.flows["aortic"].mean() * 0.06)

    @property
    def ra_compliance(self) -> Floats:
        """ml/mmHg of the atrial wall itself over time; the cavae beside it add theirs."""
        return 1.0 / self.ra_elastance


def run(
    parameters: Circulation,
    p_times_s: ArrayLike,
    r_times_s: ArrayLike,
    duration_s: float,
    *,
    breathing: Breathing | Sequence[tuple[float, Breathing]] | None = None,
    infusions: Sequence[Infusion] = (),
    rate: float = 250.0,
    warm_up_s: float = 20.0,
    step_s: float = _STEP_S,
) -> Haemodynamics:
    """Run the circulation for given atrial and ventricular activations.

    Parameters
    ----------
    parameters : Circulation
    p_times_s, r_times_s : float array
        Onsets of P and peaks of R, seconds; those before 0 belong to the run-in, which is left out of the result. Independent of one
        another: no P times is an atrium that does not contract.
    duration_s : float
    breathing : Breathing, or (onset s, Breathing) pairs, optional
        None breathes spontaneously.
    infusions : sequence of Infusion
    rate : float
        Samples a second of the result; ``1 / (rate · step_s)`` must be a whole number.
    warm_up_s : float
        Run-in before 0 s. The slowest compartment settles in about 10 s.
    step_s : float
        Integration step.

    Raises
    ------
    InputError
        No R times, a length, rate or step that cannot be; vessels too small for the step, or a heart that bleeds out: by name.
    """
    asked = f"duration {duration_s!r} s at {rate!r} Hz with steps of {step_s!r} s"
    if not all(math.isfinite(value) and value > 0 for value in (duration_s, rate, step_s)) or step_s > 0.002:
        raise InputError(f"{asked}: all must be above 0, and a step at most 0.002 s")
    stride = round(1.0 / (rate * step_s))
    if stride < 1 or abs(1.0 / (rate * step_s) - stride) > 1e-6 or round(duration_s * rate) < 1:
        raise InputError(f"{asked}: at least one sample, and whole steps a sample, are needed")
    if not math.isfinite(warm_up_s):
        raise InputError(f"warm_up_s = {warm_up_s!r}: it must be finite; below 0 counts as 0")
    warm_up_s = max(0.0, warm_up_s)
    active = Activation.of(parameters.heart, p_times_s, r_times_s)
    _check_step(parameters, step_s)
    if not breathing:
        breathing = Breathing()
    breaths = [(-math.inf, breathing)] if isinstance(breathing, Breathing) else list(breathing)
    skipped = round(warm_up_s * rate)
    rows = skipped + round(duration_s * rate)
    resets = np.rint((np.sort(np.asarray(r_times_s, dtype=np.float64).ravel()) + skipped / rate) / step_s).astype(np.int64)
    tables = _chambers(parameters), _valves(parameters), _vessels(parameters), _others(parameters)
    volumes = _start(parameters)
    state = volumes, np.zeros(4), np.zeros(4), np.array([0.0, 0.0, volumes[1], volumes[1]])
    out, surroundings = np.empty((rows, len(OUT))), np.empty((3, rows))
    block = round(_BLOCK_S * rate)
    for first in range(0, rows, block):
        last = min(first + block, rows)
        steps = np.arange(first * stride, last * stride)
        time = np.asarray(steps * step_s - skipped / rate, dtype=np.float64)
        around = outside.pressures(breaths, time)
        gift = np.sum([i.rate_ml_s(time) for i in infusions], axis=0) if infusions else np.zeros_like(time)
        beats = resets[(resets >= steps[0]) & (resets <= steps[-1])] - steps[0]
        curves = active.atrium(time), active.ventricle(time), active.ring(time)
        out[first:last] = integrate(*state, *tables, *curves, beats, around[0], around[1], gift, step_s, stride)
        surroundings[:, first:last] = [pressure[::stride] for pressure in around]
        _check_state(volumes, last / rate - skipped / rate)
    return _named(rate, out[skipped:], surroundings[:, skipped:])


def _named(rate: float, out: Floats, surroundings: Floats) -> Haemodynamics:
    named = {name: out[:, i] for i, name in enumerate(OUT)}
    pressures = {name: named[name] for name in OUT[:10]} | dict(zip(("pleural", "abdominal", "airway"), surroundings, strict=True))
    return Haemodynamics(
        rate, np.arange(len(out)) / rate, pressures,
        {name[2:]: named[name] for name in OUT[10:14]} | {"leaflet": named["leaflet_ml"], "annulus": named["annulus_ml"]},
        {name[2:]: named[name] for name in OUT[14:20]}, {name[2:]: named[name] for name in OUT[20:24]}, named["e_ra"], named["blood"],
    )


def _check_step(p: Circulation, step_s: float) -> None:
    """The explicit step follows a compartment only when little of it empties in one step."""
    g = {name: 1.0 / getattr(p, name).r for name in VESSELS}
    micro = {name: 1.0 / getattr(p, f"micro_{name}") for name in ("upper", "kidneys", "splanchnic", "legs")}
    out_of = {
        "ra": g["svc"] + g["ivc"], "la": g["pulmonary_veins"], "arteries": sum(micro.values()),
        "abdominal": g["abdominal"] + g["kidneys"] + g["splanchnic"] + g["legs"], "ivc": g["ivc"] + g["abdominal"],
        "svc": g["svc"] + g["upper"],
        "pulmonary_arteries": g["pulmonary_arteries"], "pulmonary_veins": g["pulmonary_arteries"] + g["pulmonary_veins"],
    } | {name: g[name] + micro[name] for name in micro}
    for name, conductance in out_of.items():
        part = getattr(p, name)
        stiff, field = (1.0 / part.c, "c") if isinstance(part, Vessel) else (part.e_peak, "e_peak")
        if step_s * stiff * conductance > 1.0:
            most = step_s * conductance
            limit = f"at least {most:.3g} ml/mmHg" if field == "c" else f"at most {1.0 / most:.3g} mmHg/ml"
            value = getattr(part, field)
            raise InputError(f"{name}.{field} = {value:g}: with its resistances and steps of {step_s:g} s allowed is {limit}")


def _check_state(volumes: Floats, time_s: float) -> None:
    names = ("ra", "rv", "la", "lv", *VESSELS)
    if not np.isfinite(volumes).all():
        raise InputError(
            f"the circulation ran away before {time_s:.0f} s: a wall too stiff for the step (pericardium.phi_ml, stiffness); "
            "soften it or take a smaller step_s"
        )
    if volumes.min() < 0:
        name = names[int(volumes.argmin())]
        raise InputError(
            f"{name} holds {volumes.min():.0f} ml at {time_s:.0f} s, which cannot be: give more blood_volume_ml, or take less by infusions"
        )


def _chambers(p: Circulation) -> Floats:
    rows: list[Chamber] = [p.ra, p.rv, p.la, p.lv]
    return np.array([[c.v0_ml, c.e_rest, c.e_peak, c.stiffness] for c in rows])


def _valves(p: Circulation) -> Floats:
    rows: list[Valve] = [p.tricuspid, p.pulmonary, p.mitral, p.aortic]
    return np.array([[max(v.a_min_cm2, _LEAK_CM2), max(v.a_max_cm2, v.a_min_cm2), v.opening, v.closing, RHO * v.length_cm] for v in rows])


def _vessels(p: Circulation) -> Floats:
    rows: list[Vessel] = [getattr(p, name) for name in VESSELS]
    return np.array([[v.r, v.c, v.v0_ml] for v in rows])


def _others(p: Circulation) -> Floats:
    q, h = p.pericardium, p.heart
    return np.array([
        q.k_mmhg, q.v0_ml, q.phi_ml, q.muscle_ml + q.fluid_ml, h.leaflet_c, h.leaflet_lag_s, h.annulus_share, h.annulus_lag_s,
        p.pulmonary_inlet, p.micro_upper, p.micro_kidneys, p.micro_splanchnic, p.micro_legs, h.annulus_recoil,
    ])


def _start(p: Circulation) -> Floats:
    """Volumes to begin with: chambers at diastolic pressures, what is left over the vessels in proportion to their compliance.

    Raises
    ------
    InputError
        Less blood than the vessels hold unstressed.
    """
    chambers = np.array([c.v0_ml + pressure / c.e_rest for c, pressure in ((p.ra, 4.0), (p.rv, 4.0), (p.la, 8.0), (p.lv, 8.0))])
    vessels = _vessels(p)
    arterial = 80.0 * p.arteries.c
    spare = p.blood_volume_ml - chambers.sum() - vessels[:, 2].sum() - arterial
    lowest = vessels[:, 2].sum() + chambers.sum() + arterial
    if spare <= 0:
        raise InputError(f"blood_volume_ml = {p.blood_volume_ml:g}: the vessels and chambers alone hold {lowest:.0f} ml; more is needed")
    weight = vessels[:, 1].copy()
    weight[0] = 0.0
    volumes = vessels[:, 2] + spare * weight / weight.sum()
    volumes[0] += arterial
    return np.concatenate([chambers, volumes])
