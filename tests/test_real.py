"""The real operating-room recordings, where they lie beside the project; skipped elsewhere (they are not part of it).

References: QRS times and the places of the waves in each record's median beat, read by eye; see the README beside the recordings.
"""

import json
import os
from pathlib import Path

import numpy as np
import pytest

import caval
from caval.agree import match_events

FOLDER = Path(os.environ.get("CAVAL_REAL_DATA", Path(__file__).resolve().parents[2] / "shared" / "data" / "real"))
RECORDS = ("t02o", "t05o", "t10o", "t12o", "t18c", "t25o", "t45o", "v02")

pytestmark = pytest.mark.skipif(not (FOLDER / "reference.json").exists(), reason="the real recordings are not here (CAVAL_REAL_DATA)")


@pytest.fixture(scope="module")
def reference():
    return json.loads((FOLDER / "reference.json").read_text(encoding="utf-8"))["marks"]


@pytest.fixture(scope="module")
def results():
    return {name: caval.mark(FOLDER / f"{name}.edf") for name in RECORDS}


def _qrs(name: str) -> np.ndarray:
    return caval.api.read_track(FOLDER / f"{name}.qrs").beat_times_s()


def test_beats_over_all_records(results):
    hits = missed = extra = 0
    for name, result in results.items():
        qrs, found = _qrs(name), result.beats["r_time_s"].to_numpy()
        found = found[(found > qrs[0] - 0.3) & (found < qrs[-1] + 0.3)]
        agreement = match_events(qrs, found, window_s=0.1)
        hits, missed, extra = hits + len(agreement.reference), missed + len(agreement.missed), extra + len(agreement.extra)
    assert hits / (hits + missed) >= 0.985  # the aim set for these records; single-channel detectors reach 0.94/0.80 on their kind
    assert hits / (hits + extra) >= 0.985


def test_waves_of_the_median_beat(results, reference):
    good, listed = 0, 0
    for name, places in reference.items():
        qrs, marks = _qrs(name), results[name].marks
        for wave, (place, tolerance) in places.items():
            times = np.sort(marks.loc[marks["mark"] == wave, "time_s"].to_numpy())
            agreement = match_events(qrs + place / 1000, times, window_s=0.16)
            offset = times[agreement.found] - (qrs + place / 1000)[agreement.reference]
            listed += 1
            good += agreement.sensitivity >= 0.5 and abs(np.median(offset)) <= tolerance / 1000
    assert listed == 33
    assert good >= 29


def test_a_channel_without_a_catheter_gets_no_mark_and_a_reason():
    result = caval.mark(FOLDER / "t29o.edf")
    assert len(result.marks) == 0
    assert any("disconnected" in said for said in result.warnings)


@pytest.mark.parametrize(("name", "start_s"), [("t10o", 665.0), ("t12o", 293.0)])
def test_no_mark_while_the_line_climbs(results, name, start_s):
    assert not (results[name].marks["time_s"] > start_s).any()


def test_edf_and_wfdb_give_the_same_marks(results):
    other = caval.mark(FOLDER / "t12o.hea").marks
    ours = results["t12o"].marks
    assert list(other["mark"]) == list(ours["mark"])
    assert np.allclose(other["time_s"], ours["time_s"], atol=1e-6)
    assert np.allclose(other["pressure_mmhg"], ours["pressure_mmhg"], atol=0.006)  # one stored step is 0.01 mmHg
