"""The pipeline: the same rows however it is run; stages found, ordered, replaced."""

import dataclasses

import numpy as np
import pandas as pd
import pytest

import caval
from caval import registry
from caval.errors import InputError, PluginError
from caval.model.sketch import sketch
from caval.pipeline import Pipeline
from caval.recording import Recording


@pytest.fixture(scope="module")
def recording():
    # Twelve minutes with a flush, a flat stretch and diathermy: whole blocks at 60, 240 and 600 s, and a part of one.
    return sketch(minutes=12, seed=6).recording


@pytest.fixture(scope="module")
def whole(recording):
    return caval.mark(recording)


def _same(one: caval.Result, other: caval.Result) -> None:
    for name in ("marks", "beats", "spans"):
        left, right = getattr(one, name), getattr(other, name)
        assert list(left.columns) == list(right.columns)
        assert len(left) == len(right), name
        for column in left.columns:
            if left[column].dtype.kind == "f":
                assert np.allclose(left[column], right[column], rtol=0, atol=1e-9, equal_nan=True), (name, column)
            else:
                assert (left[column] == right[column]).all(), (name, column)


@pytest.mark.parametrize("how", [{"block_s": 60.0}, {"block_s": 240.0}, {"block_s": 6000.0}, {"block_s": 120.0, "workers": 2}])
def test_rows_do_not_depend_on_blocks_or_workers(recording, whole, how):
    _same(whole, caval.mark(recording, **how))


def test_a_stretch_has_the_rows_of_the_whole(recording, whole):
    part = caval.mark(recording, start_s=130.0, stop_s=460.0, block_s=60.0)
    marks = whole.marks[(whole.marks["time_s"] >= 130) & (whole.marks["time_s"] < 460)]
    assert np.allclose(part.beats["r_time_s"], whole.beats["r_time_s"][whole.beats["r_time_s"].between(130, 460, inclusive="left")])
    # A mark at the border whose beat lies outside the stretch is left out with its beat.
    inner = marks[marks["time_s"].between(132, 458)]
    ours = part.marks[part.marks["time_s"].between(132, 458)]
    assert np.allclose(ours["time_s"], inner["time_s"], rtol=0, atol=1e-9)
    assert np.allclose(ours["pressure_mmhg"], inner["pressure_mmhg"], rtol=0, atol=1e-9)
    assert list(part.beats["beat"]) == list(range(len(part.beats)))
    clipped = caval.tables.clip_spans(whole.spans, 130.0, 460.0)
    assert np.allclose(part.spans[["onset_s", "duration_s"]], clipped[["onset_s", "duration_s"]])


def test_lazy_and_loaded_channels_give_the_same_rows(recording, whole):
    reads = []

    def counted(source):
        def read(start, stop):
            reads.append(stop - start)
            return source(start, stop).copy()

        return read

    lazy = dataclasses.replace(recording, channels=tuple(dataclasses.replace(c, source=counted(c.source)) for c in recording.channels))
    _same(whole, caval.mark(lazy, block_s=60.0))
    assert max(reads) < recording.channels[0].n_samples / 2


def test_a_record_that_starts_later_has_the_same_marks_later(recording, whole):
    seconds = 60  # a whole number of grid minutes: what is learned by the minute is learned from the same minutes
    arrays = {}
    for c in recording.channels:
        pad = np.full(round(seconds * c.sampling_rate), c.physical()[0])
        arrays[c.label] = (np.concatenate([pad, c.physical()]), c.sampling_rate, c.unit)
    later = caval.mark(Recording.from_arrays(arrays)).marks
    inner = whole.marks[whole.marks["time_s"] > 90]
    ours = later[later["time_s"] > 90 + seconds]
    assert len(ours) == len(inner)
    assert np.allclose(ours["time_s"] - seconds, inner["time_s"], atol=1e-6)


def test_the_order_of_channels_does_not_matter(recording, whole):
    turned = dataclasses.replace(recording, channels=recording.channels[::-1])
    _same(whole, caval.mark(turned))


def test_stages_run_in_the_order_of_their_needs():
    ordered = Pipeline(stages=("measure", "waves", "quality", "anchors"))._order({"cvp": "CVP", "ecg": "ECG"}, {})
    names = [s.name for s in ordered]
    assert names.index("candidates") < names.index("anchors") < names.index("waves") < names.index("measure")
    assert names.index("quality") < names.index("waves")


def test_a_need_that_nothing_fills_is_named():
    with pytest.raises(InputError, match=r"'waves' cannot run: nothing gives .*spans"):
        Pipeline(stages=("anchors", "waves")).run(sketch(minutes=0.2).recording)


def test_someone_elses_stage_takes_the_place_of_ours(recording, monkeypatch):
    @registry.stage(name="quality", gives=("spans",))
    def strict(cvp):
        return pd.DataFrame({"onset_s": [0.0], "duration_s": [cvp.stop_s], "kind": ["noise"], "channel": [cvp.label], "detail": ["theirs"]})

    installed = {**registry.stages(), "strict": registry.Installed("strict", strict.__caval__, "their-package", "1.0", "their:strict")}
    monkeypatch.setattr(registry, "stages", lambda: installed)
    result = caval.mark(recording, choose={"quality": "strict"}, stop_s=30.0)
    assert len(result.marks) == 0
    assert set(result.beats["reason"]) == {"noise"}
    assert "strict" in result.run["stages"]


def test_unknown_names_are_errors_that_list_what_there_is(recording):
    with pytest.raises(PluginError, match=r"no stage 'nobody' is installed; there are: .*anchors"):
        caval.mark(recording, choose={"anchors": "nobody"}, stop_s=5.0)
    with pytest.raises(PluginError, match="no detector 'nobody'"):
        caval.mark(recording, detectors=("nobody",), stop_s=5.0)
    with pytest.raises(InputError, match="no setting 'speed'"):
        caval.mark(recording, settings={"waves": {"speed": 1.0}}, stop_s=5.0)
    with pytest.raises(InputError, match="multiple of 60"):
        caval.mark(recording, block_s=90.0)
    with pytest.raises(InputError, match="nothing to analyse"):
        caval.mark(recording, start_s=1e6)


def test_corrected_marks_can_be_measured_again(recording, whole):
    moved = whole.marks.copy()
    moved.loc[moved["mark"] == "a", "pressure_mmhg"] = 99.0
    again = Pipeline(stages=("quality", "measure")).run(recording, given={"beats": whole.beats.assign(confidence=1.0), "marks": moved})
    beats = caval.tables.beat_table(again["beats"], again["marks"], again["readings"])
    assert (beats["a_mmhg"].dropna() == 99.0).all()
    assert np.allclose(beats["mean_mmhg"], whole.beats["mean_mmhg"], equal_nan=True)


def test_a_short_record_is_a_stated_result_without_marks():
    result = caval.mark(sketch(minutes=2 / 60, events=False).recording)
    assert len(result.marks) == 0
    assert result.warnings


def test_settings_reach_the_stage_that_stands_in(recording, monkeypatch):
    heard = []

    @registry.stage(name="their-quality", gives=("spans",))
    def theirs(cvp, *, strictness=1.0):
        assert cvp.unit == "mmHg"
        heard.append(strictness)
        return caval.tables.empty("spans")

    installed = {**registry.stages(), "theirs": registry.Installed("theirs", theirs.__caval__, "their-package", "1.0", "their:theirs")}
    monkeypatch.setattr(registry, "stages", lambda: installed)
    result = caval.mark(recording, choose={"quality": "theirs"}, settings={"quality": {"strictness": 5.0}}, stop_s=30.0)
    assert set(heard) == {5.0}
    assert result.run["settings"]["quality"] == {"strictness": 5.0}
    with pytest.raises(InputError, match="no setting 'nonsense'"):
        caval.mark(recording, choose={"quality": "theirs"}, settings={"quality": {"nonsense": 5.0}}, stop_s=30.0)
