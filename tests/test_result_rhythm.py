"""What a result says of rhythm, P and delay: in its run, in the rows of its beats, and in the files others read."""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import pytest
import wfdb

import caval
from caval.errors import InputError
from caval.model.simulate import Simulation, simulate


@cache
def made(name: str) -> Simulation:
    return simulate(name, minutes=1.5, seed=8, settings={"line.noise_mmhg": 0.1})


@cache
def marked(name: str) -> caval.Result:
    return caval.mark(made(name).recording)


def test_a_known_delay_stands_and_an_impossible_one_is_refused() -> None:
    recording = made("first_degree_block").recording
    run = caval.mark(recording, settings={"delay": {"line_delay_s": 0.05}}).run
    assert (run["delay_s"], run["delay_sd_s"], run["delay_basis"]) == (0.05, 0.0, "given")
    with pytest.raises(InputError, match=r"line_delay_s = 3\.0"):
        caval.mark(recording, settings={"delay": {"line_delay_s": 3.0}})


def test_intervals_of_each_beat_stand_in_its_row() -> None:
    beats, truth = marked("first_degree_block").beats, made("first_degree_block").truth.beats
    assert beats["pr_s"].median() == pytest.approx((truth["r_time_s"] - truth["p_time_s"]).median(), abs=0.01)
    whole = beats.dropna(subset=["p_a_s", "r_c_s"])
    assert len(whole) > 0.9 * len(beats)
    np.testing.assert_allclose(whole["a_time_s"] - whole["r_time_s"] + whole["pr_s"], whole["p_a_s"])
    assert whole["p_a_s"].between(0.08, 0.20).all()  # 80 to 100 ms at the heart (from memory), and the line


@pytest.mark.parametrize(("name", "word"), [("fibrillation", "(AFIB"), ("junctional", "(NOD"), ("complete_block", "(B3")])
def test_wfdb_reads_the_rhythm_as_a_rhythm_change(tmp_path: Path, name: str, word: str) -> None:
    path = tmp_path / "rec.hea"
    caval.write(made(name).recording, path)
    caval.mark(path).write(tmp_path / "out", stem="rec", figure=False)
    (tmp_path / "out" / "rec.hea").write_bytes(path.read_bytes())
    notes = wfdb.rdann(str(tmp_path / "out" / "rec"), "cvp")
    changes = [aux for symbol, aux in zip(notes.symbol, notes.aux_note, strict=True) if symbol == "+"]
    assert word in changes
    assert len(changes) <= 3
