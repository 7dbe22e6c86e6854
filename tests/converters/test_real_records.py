"""Real records, each as EDF and as WFDB, where they lie beside the project; skipped elsewhere (they are not part of it)."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pytest

import caval
from caval.recording import Recording
from compliance import same_annotations

FOLDER = Path(os.environ.get("CAVAL_REAL_DATA", Path(__file__).resolve().parents[3] / "shared" / "data" / "real"))
NAMES = ("t02o", "t05o", "t10o", "t12o", "t18c", "t25o", "t29o", "t45o", "v02")

pytestmark = pytest.mark.skipif(not (FOLDER / "v02.edf").exists(), reason="the real recordings are not here (CAVAL_REAL_DATA)")


def same_samples(a: Recording, b: Recording) -> None:
    for one, other in zip(a.channels, b.channels, strict=True):
        assert (one.label, one.unit, one.sampling_rate, one.n_samples) == (other.label, other.unit, other.sampling_rate, other.n_samples)
        np.testing.assert_array_equal(one.digital(), other.digital(), err_msg=one.label)
        np.testing.assert_allclose(one.physical(), other.physical(), rtol=0, atol=1e-9)


@pytest.mark.parametrize("name", NAMES)
def test_both_forms_of_a_record_are_one_and_survive_the_way_there_and_back(name: str, tmp_path: Path) -> None:
    edf, wfdb = caval.read(FOLDER / f"{name}.edf"), caval.read(FOLDER / f"{name}.hea")
    same_samples(edf, wfdb)
    caval.write(wfdb, tmp_path / "a.edf")
    caval.write(caval.read(tmp_path / "a.edf"), tmp_path / "b.hea")
    same_samples(caval.read(tmp_path / "b.hea"), wfdb)
    caval.write(edf, tmp_path / "c.hea")
    caval.write(caval.read(tmp_path / "c.hea"), tmp_path / "d.edf")
    back = caval.read(tmp_path / "d.edf")
    same_samples(back, edf)
    assert back.start_time == edf.start_time
    for a, b in zip(edf.channels, back.channels, strict=True):
        assert b.calibration == a.calibration
        for limit in ("edf.physical_min", "edf.physical_max"):
            assert b.header[limit] == a.header[limit]
    same_annotations(caval.read(tmp_path / "b.hea").annotations, wfdb.annotations, 1e-9)
    assert len(wfdb.annotations)


def test_a_copy_of_a_wfdb_record_is_the_same_file(tmp_path: Path) -> None:
    caval.write(caval.read(FOLDER / "v02.hea"), tmp_path / "v02.hea")
    assert (tmp_path / "v02.dat").read_bytes() == (FOLDER / "v02.dat").read_bytes()
