"""The NeuroKit2 plugin: detectors against known R peaks, cvp_* in the host's shapes and against the drawn truth."""

from __future__ import annotations

import warnings
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pandas as pd
import pytest
from scipy import signal as scipy_signal

from caval import registry
from caval.errors import InputError
from caval.model.sketch import sketch
from caval.recording import Signal
from caval_neurokit import cvp_clean, cvp_peaks, cvp_plot, cvp_process
from caval_neurokit.detectors import engzeemod2012, neurokit, rodrigues2021

with warnings.catch_warnings():
    warnings.simplefilter("ignore")  # the host's imports warn under pandas 3
    import neurokit2 as nk

RATE = 250
WAVES = {"a": "CVP_A_Peaks", "c": "CVP_C_Peaks", "x": "CVP_X_Troughs", "v": "CVP_V_Peaks", "y": "CVP_Y_Troughs"}
MARKERS = ["CVP_R_Peaks", "CVP_A_Peaks", "CVP_Z_Troughs", "CVP_C_Peaks", "CVP_X_Troughs", "CVP_V_Peaks", "CVP_Y_Troughs", "CVP_H_Peaks"]
DETECTORS = [neurokit, rodrigues2021, engzeemod2012]
SETTLED_S = {neurokit: 1, rodrigues2021: 1, engzeemod2012: 5}  # ends of the host's filters; engzeemod2012 learns its threshold for 5 s


@pytest.fixture(scope="module")
def drawn():
    return sketch(minutes=1, ecg_rate=RATE, pressure_rate=RATE, events=False, seed=3)


@pytest.fixture(scope="module")
def processed(drawn):
    return cvp_process(drawn.recording.read("CVP"), ecg_signal=drawn.recording.read("ECG II"), sampling_rate=RATE)


@pytest.fixture(scope="module")
def ecg():
    """An ECG of the host's generator with noise (500 Hz), and its R times: the tips of the same ECG without noise."""
    made = {"duration": 30, "sampling_rate": 500, "heart_rate": 75, "heart_rate_std": 3, "random_state": 11}
    clean = nk.ecg_simulate(noise=0, **made)
    tips, _ = scipy_signal.find_peaks(clean, height=0.6 * clean.max(), distance=200)
    return nk.ecg_simulate(noise=0.1, **made), tips / 500.0


def _matched(found, truth, within_s):
    """How many of `truth` have a neighbour in `found`, and how many of `found` have one in `truth`."""
    gap = np.abs(np.asarray(found)[:, None] - np.asarray(truth)[None, :])
    return (gap.min(axis=0) <= within_s).sum(), (gap.min(axis=1) <= within_s).sum()


# Detectors


@pytest.mark.parametrize("detect", DETECTORS)
def test_detector_finds_every_r_peak_of_the_generator(detect, ecg):
    trace, truth = ecg
    found = detect(Signal(trace, 500.0))
    inner = truth[(truth > SETTLED_S[detect]) & (truth < 29)]
    assert found.dtype == np.float64
    # 20 ms: a quarter of a QRS complex, far from its neighbours P and T
    assert _matched(found, inner, 0.02)[0] == len(inner)
    assert _matched(found[(found > 1) & (found < 29)], truth, 0.02)[1] == ((found > 1) & (found < 29)).sum()


@pytest.mark.parametrize("detect", DETECTORS)
def test_detector_does_not_mind_scale_level_and_start(detect, ecg):
    trace, _ = ecg
    # The same to a sample: the filters round otherwise when the numbers are larger.
    moved = detect(Signal(trace * 1000 + 3000, 500.0, start_s=86_400.0))
    np.testing.assert_allclose(moved - 86_400.0, detect(Signal(trace, 500.0)), atol=1 / 500 + 1e-6)


@pytest.mark.parametrize("detect", DETECTORS)
@pytest.mark.parametrize(
    "values",
    [
        np.zeros(0), np.zeros(40_000), np.full(40_000, 0.37), np.full(40_000, np.nan), np.sin(np.arange(1200)),
        np.r_[np.nan, np.zeros(9999), 1e-13],
    ],
    ids=["empty", "zero", "flat", "missing", "short", "rounding"],
)
def test_detector_gives_nothing_where_there_is_nothing(detect, values):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        found = detect(Signal(values, 500.0))
    assert found.shape == (0,)
    assert found.dtype == np.float64


@pytest.mark.parametrize("detect", DETECTORS)
def test_detector_bridges_a_gap_and_finds_nothing_in_it(detect, ecg):
    trace, truth = ecg
    values = trace.copy()
    values[5000:7500] = np.nan  # 10 s to 15 s
    found = detect(Signal(values, 500.0))
    assert not ((found >= 10) & (found < 15)).any()
    away = truth[((truth > SETTLED_S[detect]) & (truth < 9.5)) | ((truth > 16.5) & (truth < 29))]
    assert _matched(found, away, 0.02)[0] == len(away)


@pytest.mark.parametrize("detect", DETECTORS)
def test_detector_finds_nothing_on_a_lead_that_stands_still(detect, ecg):
    trace, _ = ecg
    values = trace.copy()
    values[5000:10_000] = values[5000]
    found = detect(Signal(values, 500.0))
    assert not ((found > 10.1) & (found < 19.9)).any()


def test_rodrigues_follows_an_inverted_lead(ecg):
    trace, truth = ecg
    found = rodrigues2021(Signal(-trace, 500.0))
    inner = truth[(truth > 1) & (truth < 29)]
    assert _matched(found, inner, 0.02)[0] == len(inner)


def test_detectors_give_the_same_in_threads_and_leave_the_warning_filters(ecg):
    trace, _ = ecg
    before = list(warnings.filters)
    alone = [detect(Signal(trace, 500.0)) for detect in DETECTORS]
    with ThreadPoolExecutor(2) as pool:
        together = list(pool.map(lambda detect: detect(Signal(trace, 500.0)), DETECTORS * 2))
    for one, other in zip(alone * 2, together, strict=True):
        np.testing.assert_array_equal(one, other)
    assert list(warnings.filters) == before


def test_detectors_are_registered():
    installed = registry.detectors()
    for detect in DETECTORS:
        assert installed[detect.__name__].value.function is detect
        assert installed[detect.__name__].value.role == "ecg"


# cvp_clean


def test_clean_keeps_level_place_and_shape_of_the_waves(drawn):
    raw = drawn.recording.read("CVP")
    cleaned = cvp_clean(raw, sampling_rate=RATE)
    assert cleaned.shape == raw.shape
    # 0.02 mmHg: a tenth of the resolution a monitor shows
    assert abs(cleaned.mean() - raw.mean()) < 0.02
    # what is left is the drawn noise of 0.05 mmHg, nothing of the waves of 2 to 3 mmHg
    assert np.std(cleaned - raw) < 0.06


def test_clean_takes_off_what_no_wave_is_quick_enough_for():
    time = np.arange(0, 10, 1 / 1000)
    slow, quick = 8 + 2 * np.sin(2 * np.pi * 2 * time), 0.5 * np.sin(2 * np.pi * 60 * time)
    cleaned = cvp_clean(slow + quick)
    inside = slice(500, -500)
    assert np.abs(cleaned - slow)[inside].max() < 0.02


def test_clean_leaves_missing_missing_and_the_rest_untouched_by_it(drawn):
    raw = drawn.recording.read("CVP")
    spoilt = raw.copy()
    spoilt[3000:3700] = np.nan
    cleaned = cvp_clean(pd.Series(spoilt), sampling_rate=RATE)
    np.testing.assert_array_equal(np.isnan(cleaned), np.isnan(spoilt))
    away = np.r_[0:2900, 3800 : len(raw)]
    np.testing.assert_allclose(cleaned[away], cvp_clean(raw, sampling_rate=RATE)[away], atol=1e-6)


@pytest.mark.parametrize("values", [[5.0], [np.nan, np.nan], [4, 5, 6, 7, 8]])
def test_clean_survives_next_to_nothing(values):
    assert cvp_clean(values).shape == (len(values),)


# cvp_process and cvp_peaks


def test_process_gives_a_row_per_sample_in_the_hosts_columns(processed, drawn):
    signals, info = processed
    assert list(signals.columns) == [
        "CVP_Raw", "CVP_Clean", "CVP_Quality", "CVP_Phase_Systole", "CVP_Phase_Completion_Systole", *MARKERS,
    ]
    assert len(signals) == len(drawn.recording.read("CVP"))
    assert isinstance(signals.index, pd.RangeIndex)
    assert all(signals[c].dtype == np.int64 and set(signals[c]) <= {0, 1} for c in MARKERS)
    assert signals["CVP_Quality"].between(0, 1).all()
    assert info["sampling_rate"] == RATE
    assert (info["method_peaks"], info["method_cleaning"]) == ("caval", "caval")


def test_info_has_one_entry_a_beat(processed, drawn):
    _, info = processed
    assert {len(info[c]) for c in (*MARKERS, "CVP_R_Source")} == {len(drawn.r_times_s)}
    assert info["CVP_R_Peaks"].dtype == np.int64
    for column in MARKERS[1:]:
        assert info[column].dtype == np.float64
        known = info[column][np.isfinite(info[column])]
        assert (known == np.round(known)).all()


@pytest.mark.parametrize("wave", WAVES)
def test_marks_stand_where_they_were_drawn(processed, drawn, wave):
    signals, _ = processed
    truth = drawn.marks.loc[drawn.marks["mark"] == wave, "time_s"].to_numpy()
    truth = truth[(truth > 1) & (truth < 59)]
    found = np.flatnonzero(signals[WAVES[wave]]) / RATE
    # 30 ms: three times the spread of two readers of an ECG (CSE working party 1985), half the way from a to c
    hit, right = _matched(found, truth, 0.03)
    assert hit >= 0.95 * len(truth)
    assert right >= 0.95 * len(found[(found > 1) & (found < 59)])


def test_phase_is_systole_from_r_to_v(processed):
    signals, info = processed
    phase, completion = signals["CVP_Phase_Systole"], signals["CVP_Phase_Completion_Systole"]
    assert set(phase.dropna()) == {0.0, 1.0}
    assert completion.dropna().between(0, 1).all()
    np.testing.assert_array_equal(phase.isna(), completion.isna())
    known = np.flatnonzero(np.isfinite(info["CVP_V_Peaks"]))
    assert (phase[info["CVP_R_Peaks"][known]] == 1).all()
    assert (phase[info["CVP_V_Peaks"][known[:-1]].astype(int)] == 0).all()
    assert phase[: info["CVP_R_Peaks"][0]].isna().all()


def test_phase_is_missing_in_a_beat_without_v():
    from caval_neurokit._marked import phase_of

    phase = phase_of({"CVP_R_Peaks": np.array([10, 30, 50]), "CVP_V_Peaks": np.array([20.0, np.nan, 60.0])}, 80)["CVP_Phase_Systole"]
    assert phase[:10].isna().all()
    assert (phase[10:20] == 1).all()
    assert (phase[20:30] == 0).all()
    assert phase[30:50].isna().all()
    assert phase[60:].isna().all()


def test_rpeaks_in_every_form_of_the_host_give_the_same(drawn):
    cleaned = cvp_clean(drawn.recording.read("CVP"), sampling_rate=RATE)
    signals, info = nk.ecg_peaks(nk.ecg_clean(drawn.recording.read("ECG II"), sampling_rate=RATE), sampling_rate=RATE)
    forms = [info["ECG_R_Peaks"], list(info["ECG_R_Peaks"]), info, signals, signals["ECG_R_Peaks"], (signals, info)]
    results = [cvp_peaks(cleaned, rpeaks=form, sampling_rate=RATE) for form in forms]
    assert set(results[0][1]["CVP_R_Source"]) == {"given"}
    np.testing.assert_array_equal(results[0][1]["CVP_R_Peaks"], info["ECG_R_Peaks"])
    for other in results[1:]:
        pd.testing.assert_frame_equal(other[0], results[0][0])


def test_a_gap_costs_its_beats_their_marks_and_no_beat_its_entry(drawn):
    raw = drawn.recording.read("CVP").copy()
    raw[20 * RATE : 25 * RATE] = np.nan
    r = np.rint(drawn.r_times_s * RATE)
    signals, info = cvp_process(raw, rpeaks=r, sampling_rate=RATE)
    assert len(info["CVP_A_Peaks"]) == len(r)
    inside = (info["CVP_R_Peaks"] > 20.2 * RATE) & (info["CVP_R_Peaks"] < 24.8 * RATE)
    assert inside.sum() >= 4
    for column in WAVES.values():
        assert np.isnan(info[column][inside]).all()
        assert signals[column][20 * RATE : 25 * RATE].sum() == 0
    assert (signals["CVP_Quality"][20 * RATE : 25 * RATE] == 0).all()
    assert signals["CVP_Clean"].isna().sum() == 5 * RATE


def test_peaks_without_beats_are_columns_of_zeros_and_a_warning(drawn):
    cleaned = cvp_clean(drawn.recording.read("CVP"), sampling_rate=RATE)
    with pytest.warns(UserWarning, match=r"cvp_peaks\(\).*no beats"):
        signals, info = cvp_peaks(cleaned, rpeaks=[], sampling_rate=RATE)
    assert len(signals) == len(cleaned)
    assert (signals == 0).all(axis=None)
    assert all(info[c].shape == (0,) for c in MARKERS)


def test_a_dead_line_is_zeros_and_a_warning_that_says_why(drawn):
    with pytest.warns(UserWarning, match=r"cvp_process\(\).*no marks"):
        signals, info = cvp_process(np.full(60 * RATE, 4.0), rpeaks=drawn.r_times_s * RATE, sampling_rate=RATE)
    assert (signals["CVP_Quality"] == 0).all()
    assert len(info["CVP_V_Peaks"]) == len(drawn.r_times_s)
    assert np.isnan(info["CVP_V_Peaks"]).all()


@pytest.mark.parametrize(
    ("call", "said"),
    [
        (lambda: cvp_clean([1.0, 2.0], sampling_rate=0), r"cvp_clean\(\): sampling_rate=0"),
        (lambda: cvp_clean([1.0, 2.0], method="other"), r"cvp_clean\(\): 'method' should be one of 'caval'"),
        (lambda: cvp_clean(np.zeros((5, 5))), r"cvp_clean\(\): the signal has shape \(5, 5\)"),
        (lambda: cvp_clean([]), r"cvp_clean\(\): the signal has shape \(0,\)"),
        (lambda: cvp_clean(["a"]), r"cvp_clean\(\): the signal must be"),
        (lambda: cvp_clean(pd.DataFrame({"ECG_Raw": [1.0]})), r"cvp_clean\(\): the DataFrame has none of the columns CVP_Raw"),
        (lambda: cvp_peaks(np.zeros(100), rpeaks=[5, 100]), r"cvp_peaks\(\): R peak at sample 100, but the signal has samples 0 to 99"),
        (lambda: cvp_peaks(np.zeros(100), rpeaks={"Peaks": [5]}), r"cvp_peaks\(\): 'rpeaks' has no 'ECG_R_Peaks'"),
        (lambda: cvp_process(np.zeros(100), ecg_signal=np.zeros(90)), r"cvp_process\(\): signals of 90 and 100 samples"),
        (lambda: cvp_plot(pd.DataFrame({"CVP_Raw": [1.0]})), r"cvp_plot\(\): 'cvp_signals' must be"),
    ],
)
def test_errors_name_the_function_and_the_value(call, said):
    with pytest.raises(InputError, match=f"caval error: {said}"):
        call()


# The host's own tools on our output


def test_the_host_formats_our_info(processed):
    signals, info = processed
    cleaned = {c: info[c][np.isfinite(info[c])] for c in WAVES.values()}
    formatted = nk.signal_formatpeaks(cleaned, desired_length=len(signals), peak_indices=info["CVP_R_Peaks"])
    pd.testing.assert_frame_equal(formatted, signals[list(cleaned)])


def test_the_host_computes_rate_and_event_related_features(processed):
    signals, info = processed
    rate = nk.signal_rate(info["CVP_R_Peaks"], sampling_rate=RATE, desired_length=len(signals))
    assert 68 < np.mean(rate) < 76  # drawn at 72
    both = signals.assign(ECG_Rate=rate, ECG_R_Peaks=signals["CVP_R_Peaks"])
    epochs = nk.epochs_create(both, events=[10 * RATE, 30 * RATE], sampling_rate=RATE, epochs_start=-1, epochs_end=4)
    assert set(MARKERS) <= set(epochs["1"].columns)
    assert epochs["1"]["CVP_A_Peaks"].sum() >= 4
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # the host misses its own phase columns
        features = nk.ecg_eventrelated(epochs, silent=True)
    assert list(features["ECG_Rate_Baseline"] > 60) == [True, True]


# cvp_plot


def test_plot_draws_three_panels_of_a_crop_too(processed):
    import matplotlib

    matplotlib.use("Agg")
    from matplotlib import pyplot as plt

    signals, info = processed
    for part in (signals, signals.iloc[2000:6000].reset_index(drop=True), signals.iloc[2000:2010]):
        figure = cvp_plot(part, info)
        assert [axes.get_title() for axes in figure.axes] == ["Signal and waves", "Pressure at each wave", "Single beats"]
        figure.canvas.draw()
        plt.close(figure)


def test_cvp_simulate_gives_a_signal_and_its_truth() -> None:
    from caval_neurokit import cvp_simulate

    cvp = cvp_simulate(duration=20, sampling_rate=250, heart_rate=75, random_state=3)
    signals, info = cvp_simulate(duration=20, sampling_rate=250, heart_rate=75, random_state=3, return_info=True)
    assert isinstance(cvp, np.ndarray)
    assert np.array_equal(cvp, signals["CVP"])
    assert len(signals) == 5000
    assert abs(len(info["CVP_R_Peaks"]) - 25) <= 1  # 20 s at 75/min
    assert len(info["CVP_A_Peaks"]) == len(info["CVP_R_Peaks"])
    found = cvp_process(signals["CVP"], ecg_signal=signals["ECG"], sampling_rate=250)[1]["CVP_A_Peaks"]
    truth = info["CVP_A_Peaks"][~np.isnan(info["CVP_A_Peaks"])]
    near = [np.nanmin(np.abs(found - t)) for t in truth[2:-2]]
    assert np.median(near) / 250 < 0.015  # half an a wave's width is 50 ms


def test_cvp_simulate_names_what_cannot_be() -> None:
    from caval_neurokit import cvp_simulate

    with pytest.raises(InputError, match="heart_rate"):
        cvp_simulate(duration=5, heart_rate=0)
    with pytest.raises(InputError, match="duration"):
        cvp_simulate(duration=0)
