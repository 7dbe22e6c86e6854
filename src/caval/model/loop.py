"""The integrator of the closed loop: compiled, one fixed step after another, valves and all (Numba's cache sees one file only).

Valves are those of Mynard et al. 2012 (inertia, Bernoulli resistance, an opening that follows the pressure across). Their flow is
advanced implicitly (the quadratic of the backward Euler step is solved in closed form), so that a closing valve, stiff without bound, needs
no small steps and no clipping; volumes move by those same flows on both sides, so blood is conserved to rounding.
"""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

__all__ = ["OUT", "RHO", "VESSELS", "integrate"]

Floats = NDArray[np.float64]

RHO = 1.06 / 1333.22
"""Density of blood, mmHg·s²/cm²."""

RING_REST_S = 3.0
"""How slowly the ring's rest follows the size of the ventricle (calibrated: far longer than a beat, far shorter than a bolus)."""

VESSELS = ("arteries", "upper", "kidneys", "splanchnic", "legs", "abdominal", "ivc", "svc", "pulmonary_arteries", "pulmonary_veins")
"""Order of the vessels; in the volumes they follow ra, rv, la, lv."""

OUT = ("ra", "rv", "la", "lv", "arteries", "pulmonary_arteries", "pulmonary_veins", "svc", "ivc", "pericardium",
       "v_ra", "v_rv", "v_la", "v_lv", "q_tricuspid", "q_pulmonary", "q_mitral", "q_aortic", "q_svc", "q_ivc",
       "z_tricuspid", "z_pulmonary", "z_mitral", "z_aortic", "e_ra", "blood", "leaflet_ml", "annulus_ml")
"""Columns of the result."""


@numba.njit(cache=True)
def _chamber(above: float, act: float, e_rest: float, e_peak: float, stiffness: float) -> tuple[float, float]:
    """Transmural pressure of a chamber `above` its unstressed volume, and its slope."""
    rest, slope = e_rest * above, e_rest
    if stiffness > 0.0 and above > 0.0:
        slope = e_rest * np.exp(stiffness * above)
        rest = (slope - e_rest) / stiffness
    active = act * (e_peak - e_rest)
    return rest + active * above, slope + active


@numba.njit(cache=True)
def _flow(q: float, over: float, area: float, inertance: float, inlet: float, dt: float) -> float:
    """Flow after a step with the pressure `over` across valve and inlet: backward Euler of over = B·q|q| + R·q + L·dq/dt."""
    inertia = inertance / area / dt
    bernoulli = 0.5 * RHO / (area * area)
    drive = over + inertia * q
    size = abs(drive)
    linear = inertia + inlet
    new = 2.0 * size / (linear + np.sqrt(linear * linear + 4.0 * bernoulli * size))
    return new if drive >= 0 else -new


@numba.njit(cache=True)
def integrate(
    v: Floats, q: Floats, z: Floats, ring_state: Floats, chambers: Floats, valves: Floats, vessels: Floats, other: Floats,
    atrium: Floats, ventricle: Floats, ring: Floats, resets: NDArray[np.int64], pleural: Floats, abdominal: Floats, gift: Floats,
    dt: float, stride: int,
) -> Floats:
    """March the loop over a block of steps; a row of `OUT` every `stride` steps.

    `v` (14 volumes), `q` and `z` (flow and opening of tricuspid, pulmonary, mitral, aortic valve) and `ring_state` (bulge and descent in
    ml, the right ventricle's volume at the last R and what the ring rests at) are moved on in place: the next block goes on from them.
    `resets` are the steps at which an R falls.
    """
    out = np.empty((len(atrium) // stride, 28))
    press = np.zeros(14)
    leaflet, annulus, full, rest_at = ring_state
    beat = 0
    for k in range(len(atrium)):
        while beat < len(resets) and resets[beat] <= k:
            full = v[1]
            beat += 1
        sac = pleural[k] + other[0] * np.exp((v[0] + v[1] + v[2] + v[3] + other[3] - other[1]) / other[2])
        e_ra = 0.0
        for i in range(4):
            above = v[i] - chambers[i, 0]
            if i == 0:
                above += leaflet - annulus
            elif i == 1:
                above -= leaflet
            act = atrium[k] if i % 2 == 0 else ventricle[k]
            wall, slope = _chamber(above, act, chambers[i, 1], chambers[i, 2], chambers[i, 3])
            press[i] = sac + wall
            if i == 0:
                e_ra = slope
        for i in range(10):
            outside = 0.0
            if 2 <= i <= 3 or i == 5:
                outside = abdominal[k]
            elif i >= 6:
                outside = pleural[k]
            press[4 + i] = outside + (v[4 + i] - vessels[i, 2]) / vessels[i, 1]
        for i in range(4):
            over, inlet = press[0] - press[1], 0.0
            if i == 1:
                over, inlet = press[1] - press[12], other[8]
            elif i == 2:
                over = press[2] - press[3]
            elif i == 3:
                over, inlet = press[3] - press[4], vessels[0, 0]
            if over > 0:
                z[i] += (1.0 - z[i]) * (1.0 - np.exp(-valves[i, 2] * over * dt))
            else:
                z[i] *= np.exp(valves[i, 3] * over * dt)
            area = valves[i, 0] + (valves[i, 1] - valves[i, 0]) * z[i]
            q[i] = _flow(q[i], over, area, valves[i, 4], inlet, dt)
        q_svc = (press[11] - press[0]) / vessels[7, 0]
        q_ivc = (press[10] - press[0]) / vessels[6, 0]
        q_abd = (press[9] - press[10]) / vessels[5, 0]
        q_upper = (press[5] - press[11]) / vessels[1, 0]
        q_kid = (press[6] - press[9]) / vessels[2, 0]
        q_spl = (press[7] - press[9]) / vessels[3, 0]
        q_leg = (press[8] - press[9]) / vessels[4, 0]
        m_up = (press[4] - press[5]) / other[9]
        m_kid = (press[4] - press[6]) / other[10]
        m_spl = (press[4] - press[7]) / other[11]
        m_leg = (press[4] - press[8]) / other[12]
        q_lung = (press[12] - press[13]) / vessels[8, 0]
        q_pv = (press[13] - press[2]) / vessels[9, 0]
        if k % stride == 0:
            row = out[k // stride]
            for i in range(5):
                row[i] = press[i]
            row[5], row[6], row[7], row[8], row[9] = press[12], press[13], press[11], press[10], sac
            for i in range(4):
                row[10 + i], row[14 + i], row[20 + i] = v[i], q[i], z[i]
            row[18], row[19], row[24] = q_svc, q_ivc, e_ra
            row[25] = v.sum()
            row[26], row[27] = leaflet, annulus
        v[0] += dt * (q_svc + q_ivc - q[0])
        v[1] += dt * (q[0] - q[1])
        v[2] += dt * (q_pv - q[2])
        v[3] += dt * (q[2] - q[3])
        v[4] += dt * (q[3] - m_up - m_kid - m_spl - m_leg)
        v[5] += dt * (m_up - q_upper + gift[k])
        v[6] += dt * (m_kid - q_kid)
        v[7] += dt * (m_spl - q_spl)
        v[8] += dt * (m_leg - q_leg)
        v[9] += dt * (q_kid + q_spl + q_leg - q_abd)
        v[10] += dt * (q_abd - q_ivc)
        v[11] += dt * (q_upper - q_svc)
        v[12] += dt * (q[1] - q_lung)
        v[13] += dt * (q_lung - q_pv)
        leaflet += dt * (other[4] * (1.0 - z[0]) * max(press[1] - press[0], 0.0) - leaflet) / other[5]
        # Pulled down while the fibres shorten (from where the beat began), and carried by how full the ventricle is. The latter is taken
        # against a slowly kept rest, not against the last R: a reference that jumps at R would make a wave that no mechanics made.
        rest_at += dt * (full - rest_at) / RING_REST_S
        target = other[6] * ((1.0 - other[13]) * (rest_at - v[1]) + other[13] * ring[k] * (full - v[1]))
        annulus += dt * (target - annulus) / other[7]
    ring_state[0], ring_state[1], ring_state[2], ring_state[3] = leaflet, annulus, full, rest_at
    return out
