"""The command line: files and columns of the contract, exit codes, one-line errors, nothing half-written, nothing overwritten."""

from __future__ import annotations

import hashlib
import json
import re
import subprocess
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import caval
from caval import cli, tables
from caval.model.sketch import sketch
from caval.recording import Recording
from caval.track import Track
from caval.vocabulary import WAVES

SECONDS = 30.0


def drawn(*labels: str, rename: Mapping[str, str] | None = None, unit: str = "mmHg", minutes: float = SECONDS / 60) -> Recording:
    """The drawn record with some of its channels, renamed."""
    from dataclasses import replace

    whole = sketch(minutes=minutes).recording
    chosen = [replace(c, label=(rename or {}).get(c.label, c.label)) for c in whole.channels if c.label in (labels or whole.labels)]
    return replace(whole, channels=tuple(replace(c, unit=unit) if c.unit == "mmHg" else c for c in chosen))


@pytest.fixture(scope="module")
def edf(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("edf") / "rec.edf"
    caval.write(drawn(), path)
    return path


@pytest.fixture(scope="module")
def wfdb(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("wfdb") / "rec.hea"
    caval.write(drawn(), path)
    return path


@pytest.fixture(scope="module")
def marked(edf: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """What `caval mark` makes of the EDF file."""
    out = tmp_path_factory.mktemp("marked")
    assert cli.main(["mark", str(edf), "--out", str(out), "--quiet"]) == 0
    return out


def listing(folder: Path) -> dict[str, str]:
    """Every file below `folder` with a digest of its content."""
    return {str(p.relative_to(folder)): hashlib.sha256(p.read_bytes()).hexdigest() for p in folder.rglob("*") if p.is_file()}


def fails(capsys: pytest.CaptureFixture[str], folder: Path, *argv: str | Path) -> str:
    """Run a command that must fail with one line and leave `folder` as it was; the line."""
    before = listing(folder)
    assert cli.main([str(a) for a in argv]) == 1
    said = capsys.readouterr()
    assert said.out == ""
    lines = [line for line in said.err.splitlines() if not line.startswith("caval: warning:")]
    assert len(lines) == 1, said.err
    assert lines[0].startswith("caval: ")
    assert "Traceback" not in said.err
    assert listing(folder) == before
    assert not list(folder.rglob(".caval-*"))
    return lines[0]


# What comes out


def test_files_of_an_edf_record(marked: Path) -> None:
    assert sorted(p.name for p in marked.iterdir()) == [
        "rec.png", "rec_atria.parquet", "rec_beats.parquet", "rec_marked.edf", "rec_marks.parquet", "rec_run.json", "rec_spans.parquet",
    ]


def test_columns_of_the_tables(marked: Path) -> None:
    beats = pd.read_parquet(marked / "rec_beats.parquet")
    assert tuple(beats.columns[: len(tables.BEAT_COLUMNS)]) == tables.BEAT_COLUMNS
    assert list(pd.read_parquet(marked / "rec_marks.parquet").columns) == list(tables.SCHEMAS["marks"])
    assert list(pd.read_parquet(marked / "rec_spans.parquet").columns) == list(tables.SCHEMAS["spans"])
    assert beats["beat"].tolist() == list(range(len(beats)))
    assert beats["r_time_s"].is_monotonic_increasing


def test_the_truth_is_found(marked: Path) -> None:
    """Drawn waves, far above the noise: nearly all are found, within two samples of the pressure channel."""
    truth = sketch(minutes=SECONDS / 60).marks
    marks = pd.read_parquet(marked / "rec_marks.parquet")
    for wave in "axvy":
        found = marks.loc[marks["mark"] == wave, "time_s"].to_numpy()
        expected = truth.loc[truth["mark"] == wave, "time_s"].to_numpy()
        nearest = np.abs(found[:, None] - expected[None, :]).min(axis=0)
        assert np.mean(nearest < 0.016) > 0.9, wave


def test_the_run_is_written_down(marked: Path, edf: Path) -> None:
    run = json.loads((marked / "rec_run.json").read_text(encoding="utf-8"))
    assert run["version"] == caval.__version__
    assert run["input"] == {"name": "rec.edf", "sha256": hashlib.sha256(edf.read_bytes()).hexdigest()}
    assert run["roles"] == {"cvp": "CVP", "ecg": "ECG II", "abp": "ABP"}
    assert run["counts"]["beats"] == len(pd.read_parquet(marked / "rec_beats.parquet"))
    assert "not a medical device" in run["notice"]


def test_the_marked_edf_holds_the_signals_and_the_marks(marked: Path, edf: Path) -> None:
    before, after = caval.read(edf), caval.read(marked / "rec_marked.edf")
    for label in before.labels:
        np.testing.assert_array_equal(after.channel(label).digital(), before.channel(label).digital())
    marks = pd.read_parquet(marked / "rec_marks.parquet")
    inside = after.annotations.marks()
    assert inside["mark"].value_counts().to_dict() == marks["mark"].value_counts().to_dict()
    np.testing.assert_allclose(np.sort(inside["time_s"]), np.sort(marks["time_s"]), atol=1e-4)  # EDF+ onsets as text


def test_files_of_a_wfdb_record_by_its_bare_name_with_csv(wfdb: Path, tmp_path: Path) -> None:
    assert cli.main(["mark", str(wfdb.with_suffix("")), "--out", str(tmp_path), "--table", "csv", "--quiet"]) == 0
    assert sorted(p.name for p in tmp_path.iterdir()) == [
        "rec.cvp", "rec.png", "rec_atria.csv", "rec_beats.csv", "rec_marks.csv", "rec_run.json", "rec_spans.csv",
    ]
    assert tuple(pd.read_csv(tmp_path / "rec_beats.csv").columns[: len(tables.BEAT_COLUMNS)]) == tables.BEAT_COLUMNS


def test_every_track_from_edf(edf: Path, tmp_path: Path) -> None:
    assert cli.main(["mark", str(edf), "--out", str(tmp_path), "--track", "edf,wfdb", "--track", "csv,bids", "-q"]) == 0
    names = {p.name for p in tmp_path.iterdir()}
    assert {"rec_marked.edf", "rec.cvp", "rec.hea", "rec.dat", "rec_track.csv", "rec_physioevents.tsv.gz"} <= names


def test_the_summary_counts_what_was_written(edf: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert cli.main(["mark", str(edf), "--out", str(tmp_path), "--table", "csv"]) == 0
    said = capsys.readouterr()
    beats, marks = pd.read_csv(tmp_path / "rec_beats.csv"), pd.read_csv(tmp_path / "rec_marks.csv")
    assert f"beats     {len(beats)}, usable {beats['usable'].sum()}" in said.out
    for wave, n in marks["mark"].value_counts().items():
        assert f"{wave} {n}" in said.out
    assert all(p.name in said.out for p in tmp_path.iterdir())
    assert said.err == ""


def test_a_stretch_keeps_the_time_of_the_record(edf: Path, tmp_path: Path, marked: Path) -> None:
    assert cli.main(["mark", str(edf), "--out", str(tmp_path), "--start", "10", "--stop", "20", "-q"]) == 0
    part, whole = (pd.read_parquet(p / "rec_marks.parquet") for p in (tmp_path, marked))
    assert part["time_s"].between(10, 20).all()
    inner = whole[whole["time_s"].between(11, 19)]
    assert len(inner) == part["time_s"].between(11, 19).sum()


def test_given_beats_are_taken_as_they_are(edf: Path, tmp_path: Path) -> None:
    r = np.sort(sketch(minutes=SECONDS / 60).r_times_s)
    pd.DataFrame({"time_s": r}).to_csv(tmp_path / "r.csv", index=False)
    out = tmp_path / "out"
    assert cli.main(["mark", str(edf), "--out", str(out), "--beats", str(tmp_path / "r.csv"), "--table", "csv", "-q"]) == 0
    beats = pd.read_csv(out / "rec_beats.csv")
    assert set(beats["source"]) == {"given"}
    np.testing.assert_allclose(beats["r_time_s"], r, atol=1e-9)


def test_workers_do_not_show_in_the_rows(edf: Path, tmp_path: Path, marked: Path) -> None:
    assert cli.main(["mark", str(edf), "--out", str(tmp_path), "--workers", "2", "-q"]) == 0
    pd.testing.assert_frame_equal(pd.read_parquet(tmp_path / "rec_marks.parquet"), pd.read_parquet(marked / "rec_marks.parquet"))


# Records that are not as they should be


def test_a_missing_file(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    said = fails(capsys, tmp_path, "mark", tmp_path / "absent.edf", "--out", tmp_path / "out")
    assert "absent.edf" in said
    assert "absent" in fails(capsys, tmp_path, "mark", tmp_path / "absent", "--out", tmp_path / "out")


@pytest.mark.parametrize("content", [b"", b"hello", b"\x00" * 4096, b"0       " + b"x" * 600])
def test_not_an_edf(content: bytes, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "x.edf").write_bytes(content)
    assert "x.edf" in fails(capsys, tmp_path, "mark", tmp_path / "x.edf", "--out", tmp_path / "out")


def test_a_format_that_nobody_reads(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "x.docx").write_bytes(b"hello")
    said = fails(capsys, tmp_path, "mark", tmp_path / "x.docx", "--out", tmp_path / "out")
    assert ".edf" in said
    assert ".hea" in said


def test_a_truncated_file_is_never_taken_for_whole(edf: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Refused, whether it is cut inside its samples or inside its header."""
    (tmp_path / "cut.edf").write_bytes(edf.read_bytes()[: edf.stat().st_size * 2 // 3])
    assert "cut.edf" in fails(capsys, tmp_path, "mark", tmp_path / "cut.edf", "--out", tmp_path / "out")
    (tmp_path / "head.edf").write_bytes(edf.read_bytes()[:300])
    assert "head.edf" in fails(capsys, tmp_path, "mark", tmp_path / "head.edf", "--out", tmp_path / "other")


def test_no_pressure_channel_lists_what_is_there(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    caval.write(drawn("ECG II"), tmp_path / "x.edf")
    said = fails(capsys, tmp_path, "mark", tmp_path / "x.edf", "--out", tmp_path / "out")
    assert "'ECG II' (mV, 500 Hz)" in said
    assert "--role cvp=LABEL" in said


def test_two_candidates_and_the_users_word(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    caval.write(drawn(rename={"CVP": "CVP1", "ABP": "CVP2"}), tmp_path / "x.edf")
    said = fails(capsys, tmp_path, "mark", tmp_path / "x.edf", "--out", tmp_path / "out")
    assert "'CVP1', 'CVP2'" in said
    assert cli.main(["mark", str(tmp_path / "x.edf"), "--out", str(tmp_path / "out"), "--role", "cvp=CVP1", "-q"]) == 0


def test_an_unknown_unit_is_never_guessed(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    caval.write(drawn(unit="mV"), tmp_path / "x.edf")
    said = fails(capsys, tmp_path, "mark", tmp_path / "x.edf", "--out", tmp_path / "out")
    assert "'CVP'" in said
    assert "--unit CVP=mmHg" in said


def test_the_users_unit_scales_every_pressure(edf: Path, tmp_path: Path, marked: Path) -> None:
    assert cli.main(["mark", str(edf), "--out", str(tmp_path), "--unit", "CVP=cmH2O", "-q"]) == 0
    ours, plain = (pd.read_parquet(p / "rec_marks.parquet")["pressure_mmhg"].median() for p in (tmp_path, marked))
    assert ours / plain == pytest.approx(0.735559, rel=0.02)  # 1 cmH2O in mmHg; the set of marks may differ by a few


def test_without_ecg_the_arterial_trace_serves(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    caval.write(drawn("CVP", "ABP"), tmp_path / "x.edf")
    assert cli.main(["mark", str(tmp_path / "x.edf"), "--out", str(tmp_path / "out"), "--table", "csv"]) == 0
    assert "no ECG channel; beats rest on the arterial trace" in capsys.readouterr().err
    beats = pd.read_csv(tmp_path / "out" / "x_beats.csv")
    truth = sketch(minutes=SECONDS / 60).r_times_s
    assert abs(len(beats) - len(truth)) <= 2  # the first and the last may lack their upstroke


def test_with_neither_there_is_a_stated_result_without_marks(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    caval.write(drawn("CVP"), tmp_path / "x.edf")
    assert cli.main(["mark", str(tmp_path / "x.edf"), "--out", str(tmp_path / "out"), "--table", "csv", "-q"]) == 0
    said = capsys.readouterr().err
    assert "no ECG channel" in said
    assert (tmp_path / "out" / "x.png").stat().st_size > 0
    marks = pd.read_csv(tmp_path / "out" / "x_marks.csv")
    assert list(marks.columns) == list(tables.SCHEMAS["marks"])
    assert marks["mark"].isin(list("cxvy")).sum() > 100  # some 70 beats, by the venous waves alone
    assert "venous waves alone" in said


def test_no_marks_no_wfdb_file(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A line without a catheter: zero throughout."""
    whole = drawn()
    arrays: dict[str, Any] = {c.label: (c.physical() * (c.label != "CVP"), c.sampling_rate, c.unit) for c in whole.channels}
    calibrations = {c.label: c.calibration for c in whole.channels if c.calibration is not None}
    arrays = {label: (calibrations[label].to_digital(v).astype(np.int16), rate, unit) for label, (v, rate, unit) in arrays.items()}
    caval.write(Recording.from_arrays(arrays, name="x", calibrations=calibrations), tmp_path / "x.hea")
    assert cli.main(["mark", str(tmp_path / "x"), "--out", str(tmp_path / "out"), "-q"]) == 0
    said = capsys.readouterr().err
    assert "no marks" in said
    assert "'CVP'" in said
    assert not (tmp_path / "out" / "x.cvp").exists()
    assert len(pd.read_parquet(tmp_path / "out" / "x_marks.parquet")) == 0
    assert len(pd.read_parquet(tmp_path / "out" / "x_spans.parquet")) > 0


def test_a_record_of_two_seconds(tmp_path: Path) -> None:
    caval.write(drawn(minutes=2 / 60), tmp_path / "x.edf")
    assert cli.main(["mark", str(tmp_path / "x.edf"), "--out", str(tmp_path / "out"), "-q"]) == 0
    assert (tmp_path / "out" / "x.png").exists()
    assert tuple(pd.read_parquet(tmp_path / "out" / "x_beats.parquet").columns[: len(tables.BEAT_COLUMNS)]) == tables.BEAT_COLUMNS


def test_a_channel_of_nothing(tmp_path: Path) -> None:
    """All values missing, in memory (EDF cannot say it): no marks, a reason, a figure."""
    whole = drawn()
    arrays = {c.label: (c.physical(), c.sampling_rate, c.unit) for c in whole.channels}
    arrays["CVP"][0][:] = np.nan
    result = caval.mark(Recording.from_arrays(arrays))
    assert len(result.marks) == 0
    assert len(result.beats) > 30
    assert any("no marks" in w for w in result.warnings)
    assert {f"{w}_state" for w in WAVES} <= set(result.beats.columns)
    result.plot().savefig(tmp_path / "x.png")


# Nothing overwritten, nothing half-written


def test_files_in_the_way_stay_without_force(edf: Path, marked: Path, capsys: pytest.CaptureFixture[str]) -> None:
    said = fails(capsys, marked, "mark", edf, "--out", marked)
    assert "--force" in said


def test_one_file_in_the_way_and_none_is_written(edf: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "rec_spans.parquet").write_text("mine")
    assert "rec_spans.parquet" in fails(capsys, tmp_path, "mark", edf, "--out", tmp_path)
    assert cli.main(["mark", str(edf), "--out", str(tmp_path), "--force", "-q"]) == 0
    assert (tmp_path / "rec_spans.parquet").read_bytes() != b"mine"


def test_the_input_is_never_overwritten_even_with_force(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    for name in ("x.edf", "x.hea"):
        caval.write(drawn(), tmp_path / name)
        assert "never overwritten" in fails(capsys, tmp_path, "convert", tmp_path / name, tmp_path / name, "--force")


@pytest.mark.parametrize("failure", [OSError(28, "No space left on device"), MemoryError(), ValueError("a defect"), KeyboardInterrupt()])
def test_a_failure_while_writing_leaves_nothing(
    failure: BaseException, edf: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    from caval.result import Result

    def fail(*_: object) -> None:
        raise failure

    monkeypatch.setattr(Result, "plot", fail)
    code = cli.main(["mark", str(edf), "--out", str(tmp_path / "out"), "-q"])
    assert code == (130 if isinstance(failure, KeyboardInterrupt) else 1)
    assert listing(tmp_path) == {}
    assert not list(tmp_path.rglob(".caval-*"))
    said = capsys.readouterr().err
    assert "Traceback" not in said
    assert ("--debug" in said) == isinstance(failure, ValueError)


def test_debug_shows_the_traceback(tmp_path: Path) -> None:
    with pytest.raises(caval.FileError):
        cli.main(["mark", str(tmp_path / "absent.edf"), "--out", str(tmp_path), "--debug"])


def test_a_folder_that_cannot_be_written_into(edf: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "file").write_text("x")
    fails(capsys, tmp_path, "mark", edf, "--out", tmp_path / "file")


# Usage


@pytest.mark.parametrize(
    "argv",
    [
        ["mark"],
        ["mark", "x.edf"],
        ["mark", "x.edf", "--out", "o", "--table", "xlsx"],
        ["mark", "x.edf", "--out", "o", "--track", "edf,midi"],
        ["mark", "x.edf", "--out", "o", "--role", "cvp"],
        ["mark", "x.edf", "--out", "o", "--role", "heart=CVP"],
        ["mark", "x.edf", "--out", "o", "--role", "cvp=A", "--role", "cvp=B"],
        ["mark", "x.edf", "--out", "o", "--unit", "CVP=furlong"],
        ["mark", "x.edf", "--out", "o", "--start", "-1"],
        ["mark", "x.edf", "--out", "o", "--start", "20", "--stop", "10"],
        ["mark", "x.edf", "--out", "o", "--workers", "0"],
        ["mark", "x.edf", "--out", "o", "--no-such-option"],
        ["frobnicate"],
        ["convert", "x.edf"],
    ],
)
def test_usage_errors_end_with_two(argv: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert cli.main(argv) == 2
    said = capsys.readouterr()
    assert said.out == ""
    assert said.err


def test_settings_file(edf: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    settings = tmp_path / "s.toml"
    wrong = {"[waves": "not a TOML file", "level = 3": "[waves]", "[waves]\nnonsense = 1": "nonsense", "[nobody]\na = 1": "nobody"}
    for content, said in wrong.items():
        settings.write_text(content)
        assert said in fails(capsys, tmp_path, "mark", edf, "--out", tmp_path / "out", "--settings", settings)
    assert "absent.toml" in fails(capsys, tmp_path, "mark", edf, "--out", tmp_path / "out", "--settings", tmp_path / "absent.toml")


def test_an_unknown_stage_lists_those_installed(edf: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    said = fails(capsys, tmp_path, "mark", edf, "--out", tmp_path / "out", "--stage", "anchors=theirs")
    assert "theirs" in said
    assert "anchors" in said


@pytest.mark.parametrize("argv", [["--help"], ["mark", "--help"], *([n, "-h"] for n in ("look", "convert", "simulate", "demo", "stages"))])
def test_help_teaches_and_cautions(argv: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert cli.main(argv) == 0
    said = " ".join(capsys.readouterr().out.split())
    assert "Examples:" in said
    assert "not a medical device" in said
    assert "Local protocols and licensed practice come first" in said


def test_version(capsys: pytest.CaptureFixture[str]) -> None:
    assert cli.main(["--version"]) == 0
    assert capsys.readouterr().out == f"caval {caval.__version__}\n"


def test_help_loads_nothing_heavy() -> None:
    """The whole of it in a fresh interpreter: no pandas, Matplotlib or host library behind ``caval --help``."""
    code = (
        "import sys, caval.cli; caval.cli.main(['--help'])\n"
        "print('loaded:', sorted({'numpy', 'pandas', 'scipy', 'matplotlib', 'mne', 'neurokit2', 'wfdb'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "loaded: []"


# The other commands


def test_look_shows_channels_roles_and_annotations(marked: Path, capsys: pytest.CaptureFixture[str]) -> None:
    before = listing(marked)
    assert cli.main(["look", str(marked / "rec_marked.edf")]) == 0
    said = capsys.readouterr().out
    for word in ("ECG II", "CVP", "ABP", "mmHg", "500", "125", "30 s", "CVP/a"):
        assert word in said
    assert listing(marked) == before


def test_look_does_not_need_a_venous_pressure(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    caval.write(drawn("ECG II", "ABP", rename={"ABP": "P9"}), tmp_path / "x.edf")
    assert cli.main(["look", str(tmp_path / "x.edf")]) == 0
    said = capsys.readouterr().out
    assert "P9" in said
    assert "ecg" in said
    assert "--role cvp=LABEL" in said


def test_look_at_a_file_that_is_not_there(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    fails(capsys, tmp_path, "look", tmp_path / "absent.edf")


def test_convert_there_and_back_is_exact(edf: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert cli.main(["convert", str(edf), str(tmp_path / "rec.hea")]) == 0
    assert "rec.hea" in capsys.readouterr().out
    assert cli.main(["convert", str(tmp_path / "rec.hea"), str(tmp_path / "back.edf"), "-q"]) == 0
    for a, b in zip(caval.read(edf).channels, caval.read(tmp_path / "back.edf").channels, strict=True):
        assert (a.label, a.unit, a.sampling_rate) == (b.label, b.unit, b.sampling_rate)
        np.testing.assert_array_equal(a.digital(), b.digital())


def test_convert_carries_annotations(tmp_path: Path) -> None:
    track = Track.build([1.0, 2.5], ["Lights off", "CVP/a"])
    caval.write(drawn().with_track("annotations", track), tmp_path / "x.edf")
    assert cli.main(["convert", str(tmp_path / "x.edf"), str(tmp_path / "x.hea"), "-q"]) == 0
    got = caval.read(tmp_path / "x.hea").annotations
    assert {"Lights off", "CVP/a"} <= set(got.texts)


def test_convert_keeps_what_is_there(edf: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "x.dat").write_text("mine")
    assert "x.dat" in fails(capsys, tmp_path, "convert", edf, tmp_path / "x.hea")
    assert "docx" in fails(capsys, tmp_path, "convert", edf, tmp_path / "x.docx")
    assert cli.main(["convert", str(edf), str(tmp_path / "x.hea"), "--force", "-q"]) == 0


def test_demo_runs_twice_and_says_what_to_look_at(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    for _ in range(2):
        assert cli.main(["demo", "--out", str(tmp_path / "d"), "--minutes", "0.5"]) == 0
        said = capsys.readouterr().out
        assert "demo.png" in said
        assert "no person" in said
    assert {"demo.edf", "demo.png", "demo_marked.edf", "demo_beats.csv"} <= {p.name for p in (tmp_path / "d").iterdir()}


def test_demo_leaves_a_file_that_is_not_its_own(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "demo.edf").write_text("mine")
    assert "demo.edf" in fails(capsys, tmp_path, "demo", "--out", tmp_path)


def test_stages_says_what_is_installed_and_whence(capsys: pytest.CaptureFixture[str]) -> None:
    assert cli.main(["stages"]) == 0
    said = capsys.readouterr().out
    for word in ("anchors", "quality", "waves", "measure", "qrs", "upstroke", "edf", "wfdb", ".hea", f"caval {caval.__version__}"):
        assert word in said


def test_simulate_writes_the_record_and_its_truth(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    options = ["--minutes", "0.3", "--seed", "5", "--set", "rhythm.heart_rate=80"]
    assert cli.main(["simulate", "healthy", str(tmp_path / "one.edf"), *options]) == 0
    assert sorted(listing(tmp_path)) == [
        "one.edf", "one_truth.json", "one_truth_beats.csv", "one_truth_marks.csv", "one_truth_spans.csv",
    ]
    said = json.loads((tmp_path / "one_truth.json").read_text(encoding="utf-8"))
    assert said["seed"] == 5
    assert 0.01 < said["delay_s"] < 0.06
    assert said["rhythm"][0]["heart_rate"] == 80
    marks = pd.read_csv(tmp_path / "one_truth_marks.csv")
    assert {"a", "c", "x", "v", "y"} <= set(marks["mark"])
    assert "truth/a" in caval.read(tmp_path / "one.edf").annotations.texts
    assert "mean 1 to 5" in capsys.readouterr().out


def test_simulate_is_the_same_for_the_same_seed(tmp_path: Path) -> None:
    for name in ("one", "two"):
        assert cli.main(["simulate", "fibrillation", str(tmp_path / f"{name}.hea"), "--minutes", "0.2", "--seed", "9", "-q"]) == 0
    assert (tmp_path / "one.dat").read_bytes() == (tmp_path / "two.dat").read_bytes()


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["nobody", "x.edf"], "no scenario 'nobody'; there are: .*healthy"),
        (["healthy", "x.edf", "--set", "ra.e_rest=-1"], r"ra\.e_rest = -1.*allowed are 0\.005 to 5"),
        (["healthy", "x.edf", "--set", "rhythm.heart_rate=0"], "heart_rate = 0"),
        (["healthy", "x.edf", "--set", "blood_volume_ml=900"], "blood_volume_ml = 900.*more is needed"),
        (["healthy", "x.edf", "--minutes", "0"], "minutes = 0"),
    ],
)
def test_simulate_names_what_cannot_be(
    words: list[str], said: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.chdir(tmp_path)
    assert cli.main(["simulate", *words]) == 1
    error = capsys.readouterr().err
    assert re.search(said, error)
    assert error.count("\n") == 1
    assert listing(tmp_path) == {}


@pytest.mark.parametrize("command", ["mark", "look"])
def test_a_folder_is_no_record(command: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    monkeypatch.chdir(tmp_path)
    assert cli.main([command, ".", *(["--out", "o"] if command == "mark" else [])]) == 1
    assert capsys.readouterr().err == "caval: . is a folder; name a record in it\n"
    assert listing(tmp_path) == {}


def test_demo_overwrites_only_what_a_demo_made(tmp_path: Path, edf: Path, capsys: pytest.CaptureFixture[str]) -> None:
    mine = tmp_path / "demo.edf"
    mine.write_bytes(edf.read_bytes())
    assert cli.main(["mark", str(mine), "--out", str(tmp_path), "-q"]) == 0
    before = listing(tmp_path)
    assert "demo.edf exists" in fails(capsys, tmp_path, "demo", "--out", tmp_path, "--minutes", "0.3")
    assert listing(tmp_path) == before
