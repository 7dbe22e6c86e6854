"""A simulated central venous pressure, in NeuroKit2's grammar."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval.errors import InputError
from caval.vocabulary import WAVES
from caval_neurokit._inputs import as_rate
from caval_neurokit._marked import R_COLUMN, column_of

if TYPE_CHECKING:
    from caval.model.simulate import Simulation

__all__ = ["cvp_simulate"]


def cvp_simulate(
    duration: float = 30,
    sampling_rate: float = 1000,
    heart_rate: float | None = None,
    noise: float = 0.05,
    scenario: str = "healthy",
    random_state: int = 1,
    *,
    return_info: bool = False,
    **settings: Any,
) -> NDArray[np.float64] | tuple[pd.DataFrame, dict[str, Any]]:
    """Simulate a central venous pressure by a closed-loop circulation, seen through a measuring line.

    Parameters
    ----------
    duration : float
        Seconds.
    sampling_rate : float
        Samples per second of what is returned. The recorder of the simulation runs at 125 Hz (ECG 500 Hz); other rates are reached by
        straight lines between its samples.
    heart_rate : float, optional
        Beats per minute; the scenario's own by default.
    noise : float
        Standard deviation of the noise on the pressure, mmHg.
    scenario : str
        A name (``caval simulate --help``) or the path of a .toml file.
    random_state : int
        The same state gives the same signal.
    return_info : bool
        Return ``(signals, info)`` with ECG, arterial pressure and the truth instead of the venous pressure alone.
    **settings
        Further changes by name, with ``__`` for the dot: ``line__damping=0.6``, ``ra__e_rest=0.4``.

    Returns
    -------
    array, shape (duration * sampling_rate,)
        Venous pressure in mmHg; or, with `return_info`, ``signals`` (columns ``CVP``, ``ECG``, ``ABP``) and ``info``: sample indices
        (0-based) of the true ``CVP_R_Peaks`` and of ``CVP_A_Peaks``, ``CVP_X_Troughs`` …, one entry a beat, NaN where the noise-free
        trace has no such extremum; ``sampling_rate`` and ``scenario``.

    Raises
    ------
    InputError
        A value outside its range, by name.

    Examples
    --------
    >>> cvp = cvp_simulate(duration=5, sampling_rate=250, heart_rate=60)
    >>> len(cvp), bool(0 < cvp.mean() < 6)
    (1250, True)
    """
    rate = as_rate(sampling_rate, "cvp_simulate")
    if not duration > 0:
        raise InputError(f"caval error: cvp_simulate(): 'duration' is {duration!r}; it must be above 0 s")
    changes: dict[str, Any] = {name.replace("__", "."): value for name, value in settings.items()} | {"line.noise_mmhg": float(noise)}
    if heart_rate is not None:
        changes["rhythm.heart_rate"] = float(heart_rate)
    from caval.model.simulate import simulate  # the model compiles its loop; whoever marks a record need not wait for that

    made = simulate(scenario, minutes=duration / 60, seed=random_state, settings=changes)
    n = round(duration * rate)
    signals = pd.DataFrame({name: _resampled(made, label, rate, n) for name, label in (("CVP", "CVP"), ("ECG", "ECG II"), ("ABP", "ABP"))})
    if not return_info:
        return signals["CVP"].to_numpy()
    return signals, _info(made, rate, n, scenario)


def _resampled(made: Simulation, label: str, rate: float, n: int) -> NDArray[np.float64]:
    channel = made.recording.channel(label)
    return np.interp(np.arange(n) / rate, np.arange(channel.n_samples) / channel.sampling_rate, channel.physical())


def _info(made: Simulation, rate: float, n: int, scenario: str) -> dict[str, Any]:
    r = made.truth.rhythm.r_times_s
    info: dict[str, Any] = {R_COLUMN: np.clip(np.rint(r * rate), 0, n - 1).astype(np.int64)}
    marks = made.truth.marks
    for wave in WAVES:
        if wave in set(marks["mark"]):
            last = marks[(marks["mark"] == wave) & marks["time_s"].notna()].drop_duplicates("beat", keep="last").set_index("beat")["time_s"]
            info[column_of(wave)] = np.rint(pd.Series(np.arange(len(r))).map(last).to_numpy(float) * rate)
    return info | {"sampling_rate": rate, "scenario": scenario}
