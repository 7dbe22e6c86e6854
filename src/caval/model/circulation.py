"""A closed-loop circulation with four time-varying chambers, whose right-atrial pressure has its waves from mechanics.

::

    RA ─tricuspid─ RV ─pulmonary valve─ pulmonary arteries ─ pulmonary veins ─ LA ─mitral─ LV ─aortic valve─ arteries
    │                                                                                                         │
    ├─ superior vena cava ─── upper-body veins ◀──────────────────────────────────────────────────────────────┤
    └─ inferior vena cava ─── abdominal veins ── kidneys, splanchnic, legs ◀──────────────────────────────────┘

The a wave is the atrium's own elastance; c the bulge of the closed tricuspid leaflets as the ventricle's pressure rises; x the room that
the valve ring gives the atrium as it descends with ejection; v venous return against the closed valve, and the ring's recoil as the
long-axis fibres let go; y the emptying when the valve opens.

Valves are those of Mynard et al. 2012 (inertia, Bernoulli resistance, an opening that follows the pressure across). Their flow is
advanced implicitly (the quadratic of the backward Euler step is solved in closed form), so that a closing valve, stiff without bound, needs
no small steps and no clipping; volumes move by those same flows on both sides, so blood is conserved to rounding.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import ArrayLike, NDArray

from caval.errors import InputError
from caval.model.parameters import Chamber, Circulation, Valve, Vessel

__all__ = ["Breathing", "Haemodynamics", "Infusion", "run"]

Floats = NDArray[np.float64]

_STEP_S = 0.0005
_RHO = 1.06 / 1333.22  # blood, mmHg·s²/cm²
_LEAK_CM2 = 1e-4  # a closed valve passes 0.05 ml/s at 100 mmHg
_MMHG_PER_CMH2O = 0.735559
_RING_PEAK, _RING_END = 0.7, 1.4  # of the ventricle's time to peak

_VOLUMES = ("ra", "rv", "la", "lv", "arteries", "upper", "kidneys", "splanchnic", "legs", "abdominal", "ivc", "svc", "pulmonary_arteries",
            "pulmonary_veins")
_VALVES = ("tricuspid", "pulmonary", "mitral", "aortic")
_OUT = ("ra", "rv", "la", "lv", "arteries", "pulmonary_arteries", "pulmonary_veins", "svc", "ivc", "pericardium",
        "v_ra", "v_rv", "v_la", "v_lv", "q_tricuspid", "q_pulmonary", "q_mitral", "q_aortic", "q_svc", "q_ivc",
        "z_tricuspid", "z_pulmonary", "z_mitral", "z_aortic", "e_ra", "blood", "leaflet_ml", "annulus_ml")


@dataclass(frozen=True)
class Infusion:
    """Volume given (or, negative, taken) at an even rate into the upper-body veins."""

    onset_s: float
    duration_s: float
    volume_ml: float


@dataclass(frozen=True)
class Breathing:
    """Pleural, abdominal and airway pressure over time.

    Spontaneous breaths lower the pleural pressure by `swing_mmhg`; a ventilator raises the airway pressure from `peep_cmh2o` by
    `drive_cmh2o`, of which the share `transmitted` reaches the pleura. A third of the pleural movement reaches the abdomen, with
    opposite sign in spontaneous breaths (the diaphragm).
    """

    mode: str = "spontaneous"
    rate_per_min: float = 15.0
    inspiration_s: float = 1.6
    swing_mmhg: float = 4.0
    pleural_mmhg: float = -4.0
    peep_cmh2o: float = 5.0
    drive_cmh2o: float = 12.0
    transmitted: float = 0.35

    def __post_init__(self) -> None:
        if self.mode not in ("spontaneous", "ventilated", "none"):
            raise InputError(f"breathing.mode = {self.mode!r}: allowed are spontaneous, ventilated, none")
        for name, low, high, unit in (
            ("rate_per_min", 2, 80, "1/min"),
            ("inspiration_s", 0.2, 20, "s"),
            ("swing_mmhg", 0, 40, "mmHg"),
            ("pleural_mmhg", -20, 20, "mmHg"),
            ("peep_cmh2o", 0, 30, "cmH2O"),
            ("drive_cmh2o", 0, 60, "cmH2O"),
            ("transmitted", 0, 1, ""),
        ):
            if not low <= getattr(self, name) <= high:
                raise InputError(f"breathing.{name} = {getattr(self, name)!r}: allowed are {low:g} to {high:g} {unit}".rstrip())
        period = 60.0 / self.rate_per_min
        if self.inspiration_s > 0.9 * period:
            raise InputError(f"breathing.inspiration_s = {self.inspiration_s:g}: longer than nine tenths of a breath ({period:g} s)")

    def starts_s(self, start_s: float, stop_s: float) -> Floats:
        """Onset of every inspiration in ``[start_s, stop_s)``."""
        if self.mode == "none":
            return np.empty(0)
        period = 60.0 / self.rate_per_min
        return np.arange(np.ceil(start_s / period), np.ceil(stop_s / period), dtype=np.float64) * period

    def pressures(self, time_s: Floats) -> tuple[Floats, Floats, Floats]:
        """Pleural, abdominal and airway pressure, mmHg, at times in seconds; a breath begins at 0 s."""
        share = self._shape(time_s)
        if self.mode == "spontaneous":
            pleural = self.pleural_mmhg - self.swing_mmhg * share
            return pleural, self.swing_mmhg * share / 3.0, np.zeros_like(time_s)
        if self.mode == "ventilated":
            airway = (self.peep_cmh2o + self.drive_cmh2o * share) * _MMHG_PER_CMH2O
            pleural = self.pleural_mmhg + self.transmitted * airway
            return pleural, self.transmitted * airway / 3.0, airway
        return np.full_like(time_s, self.pleural_mmhg), np.zeros_like(time_s), np.zeros_like(time_s)

    def _shape(self, time_s: Floats) -> Floats:
        """0 at the end of expiration, 1 at the end of inspiration; smooth up, exponential down."""
        period = 60.0 / self.rate_per_min
        phase = np.mod(time_s, period)
        up = 0.5 * (1 - np.cos(np.pi * np.clip(phase / self.inspiration_s, 0, 1)))
        rest = np.clip(phase - self.inspiration_s, 0, None)
        fade = np.exp(-rest / 0.35) * np.clip((period - phase) / 0.2, 0, 1)
        return np.where(phase < self.inspiration_s, up, fade)


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
        No R times, a length or rate that cannot be.
    """
    stride = 1.0 / (rate * step_s)
    if not duration_s > 0 or abs(stride - round(stride)) > 1e-6 or stride < 1:
        raise InputError(
            f"duration {duration_s!r} s at {rate!r} Hz with steps of {step_s!r} s: a length above 0 and whole steps a sample are needed"
        )
    r = np.sort(np.asarray(r_times_s, dtype=np.float64))
    if not len(r):
        raise InputError("r_times_s is empty: a heart that never beats keeps no circulation")
    p = np.sort(np.asarray(p_times_s, dtype=np.float64))
    warm_up_s = max(0.0, warm_up_s)
    steps = round((warm_up_s + duration_s) * rate) * round(stride)
    time = np.arange(steps, dtype=np.float64) * step_s - warm_up_s
    pleural, abdominal, airway = _breath(breathing, time)
    gift = np.zeros(steps)
    for infusion in infusions:
        gift[(time >= infusion.onset_s) & (time < infusion.onset_s + infusion.duration_s)] += infusion.volume_ml / infusion.duration_s
    peak = parameters.heart.ventricle_peak_s * np.sqrt(np.clip(_before(r), 0.3, 1.5))
    ventricle = _ventricle(time, r + parameters.heart.ventricle_delay_s, peak)
    ring = _ring(time, r + parameters.heart.ventricle_delay_s, peak)
    atrium = _atrium(time, p + parameters.heart.atrium_delay_s, parameters.heart.atrium_length_s)
    resets = np.clip(np.rint((r + warm_up_s) / step_s), -1, steps).astype(np.int64)
    out = _integrate(
        _start(parameters), _chambers(parameters), _valves(parameters), _vessels(parameters), _others(parameters),
        atrium, ventricle, ring, resets[resets >= 0], pleural, abdominal, gift, step_s, round(stride),
    )
    keep = slice(round(warm_up_s * rate), None)
    named = {name: out[keep, i] for i, name in enumerate(_OUT)}
    every = slice(round(warm_up_s * rate) * round(stride), None, round(stride))
    around = {"pleural": pleural[every], "abdominal": abdominal[every], "airway": airway[every]}
    pressures = {name: named[name] for name in _OUT[:10]} | around
    return Haemodynamics(
        rate, np.arange(len(named["ra"])) / rate, pressures,
        {name[2:]: named[name] for name in _OUT[10:14]} | {"leaflet": named["leaflet_ml"], "annulus": named["annulus_ml"]},
        {name[2:]: named[name] for name in _OUT[14:20]}, {name[2:]: named[name] for name in _OUT[20:24]}, named["e_ra"], named["blood"],
    )


def _breath(breathing: Breathing | Sequence[tuple[float, Breathing]] | None, time: Floats) -> tuple[Floats, Floats, Floats]:
    if breathing is None or isinstance(breathing, Breathing):
        return (breathing or Breathing()).pressures(time)
    pleural, abdominal, airway = breathing[0][1].pressures(time)
    for onset_s, later in breathing[1:]:
        since = slice(int(np.searchsorted(time, onset_s)), None)
        pleural[since], abdominal[since], airway[since] = later.pressures(time[since])
    return pleural, abdominal, airway


def _before(times: Floats) -> Floats:
    """Interval before each event; the first has that of the second."""
    gaps = np.diff(times, prepend=np.nan)
    gaps[0] = gaps[1] if len(gaps) > 1 else 0.85
    return gaps


def _ventricle(time: Floats, onset: Floats, peak: Floats) -> Floats:
    """Normalised elastance of the ventricles (Stergiopulos et al. 1996), 0 to 1; of two beats that overlap the stronger counts."""
    out = np.zeros_like(time)
    for lag in (0, 1):
        beat = np.searchsorted(onset, time, "right") - 1 - lag
        inside = beat >= 0
        since = (time - onset[np.maximum(beat, 0)]) / peak[np.maximum(beat, 0)]
        up = np.clip(since / 0.7, 0, None) ** 1.9
        down = np.clip(since / 1.173, 0, 50.0) ** 21.9
        out = np.maximum(out, np.where(inside, 1.55 * up / (1 + up) / (1 + down), 0.0))
    return out


def _ring(time: Floats, onset: Floats, peak: Floats) -> Floats:
    """Pull of the long-axis fibres on the valve ring, 0 to 1: greatest before the ventricle's tension is, gone as filling begins.

    The shape (a cosine hump over 0 to 1.4 times the time to peak, highest at 0.7 of it) is calibrated to the place of x and the width of v.
    """
    beat = np.searchsorted(onset, time, "right") - 1
    since = np.where(beat >= 0, (time - onset[np.maximum(beat, 0)]) / peak[np.maximum(beat, 0)], 0.0)
    up = np.sin(0.5 * np.pi * np.clip(since / _RING_PEAK, 0, 1)) ** 2
    return up * np.cos(0.5 * np.pi * np.clip((since - _RING_PEAK) / (_RING_END - _RING_PEAK), 0, 1)) ** 2


def _atrium(time: Floats, onset: Floats, length_s: float) -> Floats:
    """Normalised atrial contraction: one smooth hump."""
    if not len(onset):
        return np.zeros_like(time)
    beat = np.searchsorted(onset, time, "right") - 1
    since = np.where(beat >= 0, time - onset[np.maximum(beat, 0)], np.inf)
    phase = np.clip(since / length_s, 0, 1)
    return 0.5 * (1 - np.cos(2 * np.pi * phase))


def _chambers(p: Circulation) -> Floats:
    rows: list[Chamber] = [p.ra, p.rv, p.la, p.lv]
    return np.array([[c.v0_ml, c.e_rest, c.e_peak, c.stiffness] for c in rows])


def _valves(p: Circulation) -> Floats:
    rows: list[Valve] = [p.tricuspid, p.pulmonary, p.mitral, p.aortic]
    return np.array([[max(v.a_min_cm2, _LEAK_CM2), max(v.a_max_cm2, v.a_min_cm2), v.opening, v.closing, _RHO * v.length_cm] for v in rows])


def _vessels(p: Circulation) -> Floats:
    rows: list[Vessel] = [getattr(p, name) for name in _VOLUMES[4:]]
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


@numba.njit(cache=True, fastmath=False)
def _integrate(
    v: Floats, chambers: Floats, valves: Floats, vessels: Floats, other: Floats, atrium: Floats, ventricle: Floats, ring: Floats,
    resets: NDArray[np.int64], pleural: Floats, abdominal: Floats, gift: Floats, dt: float, stride: int,
) -> Floats:
    """March the loop; a row of `_OUT` every `stride` steps."""
    n = len(atrium)
    out = np.empty((n // stride, 28))
    q, z = np.zeros(4), np.zeros(4)
    press, bulge = np.zeros(14), np.zeros(4)
    leaflet = annulus = 0.0
    full = v[1]
    beat = 0
    for k in range(n):
        while beat < len(resets) and resets[beat] <= k:
            full = v[1]
            beat += 1
        sac = pleural[k] + other[0] * np.exp((v[0] + v[1] + v[2] + v[3] + other[3] - other[1]) / other[2])
        bulge[0], bulge[1] = leaflet - annulus, -leaflet
        e_ra = 0.0
        for i in range(4):
            act = atrium[k] if i % 2 == 0 else ventricle[k]
            above = v[i] + bulge[i] - chambers[i, 0]
            rest = chambers[i, 1] * above
            if chambers[i, 3] > 0.0 and above > 0.0:
                rest = chambers[i, 1] * (np.exp(chambers[i, 3] * above) - 1.0) / chambers[i, 3]
            press[i] = sac + rest + act * (chambers[i, 2] - chambers[i, 1]) * above
            if i == 0:
                e_ra = chambers[0, 1] + act * (chambers[0, 2] - chambers[0, 1])
        for i in range(10):
            outside = 0.0
            if 2 <= i <= 3 or i == 5:
                outside = abdominal[k]
            elif i >= 6:
                outside = pleural[k]
            press[4 + i] = outside + (v[4 + i] - vessels[i, 2]) / vessels[i, 1]
        # valves: tricuspid, pulmonary, mitral, aortic
        for i in range(4):
            inlet = 0.0
            if i == 0:
                over, inlet = press[0] - press[1], 0.0
            elif i == 1:
                over, inlet = press[1] - press[12], other[8]
            elif i == 2:
                over, inlet = press[2] - press[3], 0.0
            else:
                over, inlet = press[3] - press[4], vessels[0, 0]
            if over > 0:
                z[i] += (1.0 - z[i]) * (1.0 - np.exp(-valves[i, 2] * over * dt))
            else:
                z[i] *= np.exp(valves[i, 3] * over * dt)
            area = valves[i, 0] + (valves[i, 1] - valves[i, 0]) * z[i]
            inertia = valves[i, 4] / area / dt
            bern = 0.000397543 / (area * area)  # half the density over the area squared
            drive = over + inertia * q[i]
            lin = inertia + inlet
            size = abs(drive)
            q[i] = 2.0 * size / (lin + np.sqrt(lin * lin + 4.0 * bern * size))
            if drive < 0:
                q[i] = -q[i]
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
        shut = 1.0 - z[0]
        leaflet += dt * (other[4] * shut * max(press[1] - press[0], 0.0) - leaflet) / other[5]
        drawn = 1.0 - other[13] * (1.0 - ring[k])
        annulus += dt * (other[6] * drawn * (full - v[1]) - annulus) / other[7]
    return out
