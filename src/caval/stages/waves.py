"""The a, z, c, x, v, y and h of every beat.

A running picture of the cardiac cycle (the median of the R-aligned beats of the two minutes around, on a fixed grid) says where each wave
is to be expected; the single beat decides. The a is sought after its P, wherever that falls, and before R where no P is known. A mark
stands on an extremum of the beat's own trace; where c has run into the slope between a and x it is the corner of that slope and called
fused, as an a that has run into c, and a v that a cannon wave hides; where nothing is, nothing is marked.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from caval import tables
from caval.recording import Signal
from caval.registry import stage
from caval.stages._extrema import Extrema, traces
from caval.stages._found import Found
from caval.stages._picture import running_pictures
from caval.stages._signal import fill
from caval.stages._usable import usable_beats
from caval.vocabulary import WAVES

__all__ = ["waves"]

_LATEST_CANNON_S = 0.25
"""How far past R an a may stand that the picture has at a fixed place: the cannon wave of a junctional rhythm, through a line."""
_INTO_NEXT_S = 0.12
"""How far past the next R v and y may stand: in a fast heart, through a line, they do."""
_NEAR_Y_S = 0.12
"""A deeper nadir this near is the y."""


@stage(name="waves", gives=("marks",), margin_s=150.0)
def waves(
    cvp: Signal,
    beats: pd.DataFrame,
    spans: pd.DataFrame,
    atria: pd.DataFrame | None = None,
    coupling: pd.DataFrame | None = None,
    *,
    smooth_hz: float = 12.0,
    fine_hz: float = 20.0,
    delay_s: float = 0.03,
) -> pd.DataFrame:
    """Mark the waves of every usable beat.

    Parameters
    ----------
    cvp : Signal
        Venous pressure, mmHg.
    beats, spans : DataFrame
        As the anchors and quality stages give them.
    atria, coupling : DataFrame, optional
        P waves, and what the ECG shows of the atria of each beat, as the atrial stage gives them. Without them a is sought at a fixed place
        before R.
    smooth_hz : float
        Broad waves (x, v, y, h), and all where the trace is noisy, are found after a zero-phase low-pass at this frequency.
    fine_hz : float
        Where the noise allows it, narrow waves (a, c) are found, and all are placed, on the trace low-passed at this higher frequency.
    delay_s : float
        Line and monitor delay with which z is read when there is no foot between a and c and no P to tell it: the pressure at R plus this.

    Returns
    -------
    DataFrame
        ``time_s, mark, beat, pressure_mmhg, confidence, state``, in time order. Times are those of the channel as recorded; pressures
        are those of the low-passed trace. An a has the number of the R that follows its P; several may stand between two R.
    """
    if not len(beats) or len(cvp) < 2 * cvp.sampling_rate:
        return tables.empty("marks")
    values, missing = fill(cvp.values)
    if missing.all():
        return tables.empty("marks")
    smooth, read = traces(cvp, values, smooth_hz, fine_hz)
    usable, _ = usable_beats(cvp, beats, spans)
    pictures = running_pictures(read, beats, usable, atria, coupling)
    if not pictures:
        return tables.empty("marks")
    found = Found(read, beats, usable, pictures)
    sharp = {sign: Extrema.of(read, sign) for sign in (1.0, -1.0)}
    broad = {sign: Extrema.of(smooth, sign) for sign in (1.0, -1.0)}
    r, next_r, last = found.r, found.next_r, found.next_r + _INTO_NEXT_S
    of_p = found.seek_after_p(sharp[1.0], atria, v=found.guess("v", broad[1.0], r + 0.16, last))
    broad[1.0].take_near(of_p.time)  # one extremum carries one mark
    for peaks in (broad[1.0], sharp[1.0]):  # a wave too narrow for the smoother trace may stand on the finer one
        found.seek("v", peaks, r + 0.16, last)
    late_a = found.hide_v(of_p)
    for troughs in (broad[-1.0], sharp[-1.0]):
        found.seek("x", troughs, r + 0.06, np.fmin(found.time("v"), late_a) - 0.03)
        found.seek("y", troughs, np.fmax(found.time("v"), late_a) + 0.04, last)
    found.deepen("y", broad[-1.0], found.time("y") - _NEAR_Y_S, np.fmin(found.time("y") + _NEAR_Y_S, last))
    for wave in "vy":
        found.sharpen(wave, sharp[1.0 if WAVES[wave].is_peak else -1.0])
    bounds = np.fmax(r - 0.30, found.before()), np.minimum(r + _LATEST_CANNON_S, found.time("x") - 0.05)
    found.seek("a", sharp[1.0], *bounds, rows=found.without_a(of_p, coupling))
    found.join_a(of_p)
    broad[1.0].take_near(found.time("a"))
    found.seek("c", sharp[1.0], np.fmax(r + 0.02, found.time("a") + 0.04), np.fmin(found.time("x"), found.time("v") - 0.05) - 0.02)
    found.one_of_two()
    found.deepen("x", broad[-1.0], np.fmax(r + 0.06, found.time("c") + 0.02), np.fmin(found.time("v"), late_a) - 0.03)
    found.sharpen("x", sharp[-1.0])
    found.seek("h", broad[1.0], found.time("y") + 0.08, next_r - 0.25)
    found.corner_c()
    found.corner_a()
    found.corner_v(of_p)
    found.foot_z(sharp[-1.0], delay_s)
    return found.table()
