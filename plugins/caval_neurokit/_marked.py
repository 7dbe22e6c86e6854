"""Between the pipeline's tables (seconds) and the host's shapes (a row per sample, an entry per beat)."""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval.api import mark
from caval.recording import Recording
from caval.result import Result
from caval.vocabulary import SPANS, WAVES

__all__ = ["R_COLUMN", "column_of", "info_of", "markers_of", "phase_of", "quality_of", "run"]

R_COLUMN = "CVP_R_Peaks"
"""R of every beat: as given, from the ECG, or the best estimate from the pressures."""


def column_of(wave: str) -> str:
    """Column and key of a wave: ``column_of("a") == "CVP_A_Peaks"``, ``column_of("x") == "CVP_X_Troughs"``."""
    return f"CVP_{wave.upper()}_{'Peaks' if WAVES[wave].is_peak else 'Troughs'}"


def run(
    cvp: NDArray[np.float64],
    sampling_rate: float,
    function: str,
    *,
    r_samples: NDArray[np.float64] | None = None,
    ecg: NDArray[np.float64] | None = None,
    abp: NDArray[np.float64] | None = None,
) -> Result:
    """The pipeline's result for arrays on one clock; a warning that names `function` when there is nothing to mark."""
    arrays = {"CVP": (cvp, sampling_rate, "mmHg")}
    if ecg is not None:
        arrays["ECG"] = (ecg, sampling_rate, "mV")
    if abp is not None:
        arrays["ABP"] = (abp, sampling_rate, "mmHg")
    beats = None if r_samples is None else r_samples / sampling_rate
    result = mark(Recording.from_arrays(arrays), roles={label.lower(): label for label in arrays}, beats=beats)
    if not len(result.marks):
        step = "" if len(result.beats) else ". Give 'rpeaks', or to cvp_process() an 'ecg_signal'"
        warnings.warn(f"caval warning: {function}(): {'; '.join(result.warnings) or 'no marks'}{step}", stacklevel=3)
    return result


def _at(time_s: Any, sampling_rate: float, length: int) -> NDArray[np.int64]:
    """Nearest samples of times in seconds."""
    return np.clip(np.rint(np.asarray(time_s, dtype=np.float64) * sampling_rate), 0, length - 1).astype(np.int64)


def markers_of(result: Result, sampling_rate: float, length: int) -> pd.DataFrame:
    """Marker columns, int64 0/1, a row per sample: R and every mark of every wave."""
    placed = {R_COLUMN: result.beats["r_time_s"]}
    placed |= {column_of(wave): result.marks.loc[result.marks["mark"] == wave, "time_s"] for wave in WAVES}
    signals = {}
    for column, time_s in placed.items():
        signals[column] = np.zeros(length, dtype=np.int64)
        signals[column][_at(time_s, sampling_rate, length)] = 1
    return pd.DataFrame(signals)


def info_of(result: Result, sampling_rate: float, length: int, method: str) -> dict[str, Any]:
    """The host's dict: sample indices, one entry a beat, NaN where the beat has no such mark."""
    info: dict[str, Any] = {
        "method_peaks": method,
        R_COLUMN: _at(result.beats["r_time_s"], sampling_rate, length),
        "CVP_R_Source": result.beats["source"].to_numpy(object),
    }
    for wave in WAVES:
        time_s = result.beats[f"{wave}_time_s"].to_numpy(np.float64)
        samples = np.full(len(time_s), np.nan)
        known = np.isfinite(time_s)
        samples[known] = _at(time_s[known], sampling_rate, length)
        info[column_of(wave)] = samples
    info["sampling_rate"] = sampling_rate
    return info


def quality_of(result: Result, sampling_rate: float, length: int) -> NDArray[np.float64]:
    """Mean confidence (0 to 1) of the marks of the beat that a sample belongs to, R to R; 0 where no beat could be read.

    The last beat reaches as far as the median beat is long.
    """
    quality = np.zeros(length)
    r = _at(result.beats["r_time_s"], sampling_rate, length)
    if len(r):
        per_beat = result.marks.groupby("beat")["confidence"].mean().reindex(result.beats["beat"]).fillna(0.0).to_numpy()
        last = r[-1] + (np.median(np.diff(r)) if len(r) > 1 else sampling_rate)
        bounds = np.append(r, min(int(last), length))
        quality[bounds[0] : bounds[-1]] = np.repeat(per_beat, np.diff(bounds))
    harmless = [kind for kind, term in SPANS.items() if not term.unusable]
    spans = result.spans[(result.spans["channel"] == "CVP") & ~result.spans["kind"].isin(harmless)]
    for onset, duration in zip(spans["onset_s"], spans["duration_s"], strict=True):
        start, stop = np.ceil(np.maximum([onset, onset + duration], 0.0) * sampling_rate).astype(int)
        quality[start:stop] = 0.0
    return quality


def phase_of(info: dict[str, Any], length: int) -> pd.DataFrame:
    """Systole 1 (R to v), diastole 0 (v to the next R), and how much of it is over, 0 to 1; NaN where a beat has no v and at the ends."""
    phase = np.full(length, np.nan)
    completion = np.full(length, np.nan)
    r, v = info[R_COLUMN], info[column_of("v")]
    for beat in np.flatnonzero(np.isfinite(v)):
        middle = int(v[beat])
        for value, start, stop in ((1.0, r[beat], middle), (0.0, middle, r[beat + 1] if beat + 1 < len(r) else middle)):
            if stop > start:
                phase[start:stop] = value
                completion[start:stop] = np.linspace(0.0, 1.0, stop - start)
    return pd.DataFrame({"CVP_Phase_Systole": phase, "CVP_Phase_Completion_Systole": completion})
