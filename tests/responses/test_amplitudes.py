import numpy as np
import pytest

from napari_boutonrelease.response_shape import ResponseShape
from napari_boutonrelease.responses import Baseline, fit_amplitudes, measure_responses
from napari_boutonrelease.responses.noise import white
from napari_boutonrelease.responses.response_design import build_design
from napari_boutonrelease.responses.windows import plan_trial_windows, rest_s


def fit(traces, *, baseline=None, shape=None, slope=False):
    return fit_amplitudes(
        traces.f,
        baseline=traces.baseline() if baseline is None else baseline,
        timing=traces.timing,
        y_px=traces.y_px,
        shape=traces.shape if shape is None else shape,
        used=traces.used,
        baseline_s=None,
        slope=slope,
    )


def true_baseline(traces):
    n = traces.f.shape[0]
    return Baseline(f0=traces.f0, f0_se=np.zeros(n), usable=np.ones(n, dtype=bool), curve=("constant",) * n)


def releases(rng, size, *, q=0.3, p=0.3, n=2):
    return rng.binomial(n, p, size) * q * (1 + 0.2 * rng.normal(size=size))


@pytest.mark.parametrize("slope", [False, True])
def test_noise_free_amplitudes_are_exact_whatever_the_phase_exposure_and_row(make_timing, make_traces, shape, slope):
    rng = np.random.default_rng(1)
    first = 0.5 + 0.9 * np.arange(12) + rng.uniform(0, 0.01, 12)
    stimulus_s = first[:, None] + np.array([0.0, 0.033, 0.1])
    stimulus_s[3, 1:] = np.nan
    stimulus_s[7, 2] = np.nan
    timing = make_timing(stimulus_s, n_frames=1200, exposure_s=0.006, row_time_s=6e-5)
    truth = np.where(np.isfinite(stimulus_s), rng.uniform(-0.1, 1.0, (4, 12, 3)), np.nan)
    traces = make_traces(np.nan_to_num(truth), timing=timing, shape=shape, y_px=[0, 20, 63.5, 140])
    found = fit(traces, baseline=true_baseline(traces), slope=slope)
    assert np.nanmax(np.abs(found.amplitude - truth)) < 3e-3
    assert np.array_equal(np.isnan(found.amplitude), np.isnan(truth))
    at = np.searchsorted(timing.frame_start_s, np.nan_to_num(stimulus_s), side="right") - 1
    assert found.amplitude_counts == pytest.approx(found.amplitude * traces.f0[:, at], rel=1e-9, nan_ok=True)


def test_amplitude_does_not_depend_on_where_in_a_frame_the_stimulus_falls(make_timing, make_traces, shape):
    amplitudes = []
    for phase in np.linspace(0.0, 0.009, 10):
        timing = make_timing([[0.5 + phase]], n_frames=150)
        traces = make_traces(np.ones((1, 1, 1)), timing=timing, shape=shape)
        amplitudes.append(fit(traces, baseline=true_baseline(traces)).amplitude.item())
    assert np.ptp(amplitudes) < 2e-3
    assert np.mean(amplitudes) == pytest.approx(1.0, abs=2e-3)


@pytest.mark.parametrize(
    "slow",
    [
        ResponseShape(latency_s=0.001, rise_s=0.002, decay_s=0.1),
        ResponseShape(latency_s=0.001, rise_s=0.002, decay_s=0.06, slow_fraction=0.25, slow_decay_s=0.5),
    ],
)
def test_equal_releases_25_ms_apart_have_a_ratio_of_one(make_timing, make_regular, make_traces, slow):
    rng = np.random.default_rng(2)
    timing = make_timing(make_regular(trials=40, interval_s=1.5, pulse_interval_s=0.025, jitter=rng), n_frames=6100)
    truth = np.full((6, 40, 2), 0.4)
    traces = make_traces(truth, timing=timing, shape=slow, rng=rng, noise=0.05)
    found = fit(traces, baseline=true_baseline(traces))
    ratio = np.mean(found.amplitude[:, :, 1]) / np.mean(found.amplitude[:, :, 0])
    assert ratio == pytest.approx(1.0, abs=0.03)


def test_tails_that_reach_into_the_next_trials_are_taken_out(make_timing, make_regular, make_traces):
    rng = np.random.default_rng(3)
    slow = ResponseShape(latency_s=0.0, rise_s=0.01, decay_s=0.8)
    timing = make_timing(make_regular(trials=30, interval_s=0.7, pulses=1), n_frames=2200)
    truth = releases(rng, (3, 30, 1), p=0.5)
    traces = make_traces(truth, timing=timing, shape=slow)
    found = fit(traces, baseline=true_baseline(traces))
    assert np.max(np.abs(found.amplitude - truth)) < 3e-3
    assert found.noise_from == ("residuals",) * 3


def test_responses_do_not_cross_segments(make_timing, make_traces):
    slow = ResponseShape(latency_s=0.0, rise_s=0.01, decay_s=0.8)
    stimulus_s = np.array([[0.5], [1.5], [2.5], [3.5]])
    timing = make_timing(stimulus_s, n_frames=400, segment=np.repeat(np.arange(4), 100), trial_segment=np.arange(4))
    truth = np.array([0.9, 0.0, 0.5, 0.0]).reshape(1, 4, 1)
    traces = make_traces(truth, timing=timing, shape=slow)
    found = fit(traces, baseline=true_baseline(traces))
    assert np.max(np.abs(found.amplitude - truth)) < 3e-3


def test_error_is_within_15_percent_of_the_cramer_rao_bound(
    make_timing, make_regular, make_traces, exposure_mean, shape
):
    rng = np.random.default_rng(4)
    timing = make_timing(make_regular(trials=60, jitter=rng), n_frames=6000)
    truth = releases(rng, (25, 60, 2))
    noise = 0.08
    traces = make_traces(truth, timing=timing, shape=shape, rng=rng, noise=noise, bleach_s=1e9)
    found = fit(traces)
    bounds = []
    for pulses in timing.stimulus_s:  # unknown offset, known shape, all frames until the next trial
        near = np.abs(timing.frame_start_s - pulses[0]) <= 0.5
        design = np.column_stack(
            [np.ones(near.sum())] + [exposure_mean(shape, timing.frame_start_s[near] - t, 0.01) for t in pulses]
        )
        bounds.append(noise * np.sqrt(np.diag(np.linalg.inv(design.T @ design))[1:]))
    error = np.sqrt(np.mean((found.amplitude - truth) ** 2, axis=(0, 1)))
    bound = np.sqrt(np.mean(np.square(bounds), axis=0))
    assert np.all(error < 1.1 * bound)
    assert np.mean(found.amplitude - truth) == pytest.approx(0.0, abs=0.004)


@pytest.mark.parametrize("memory", [0.0, 0.5])
@pytest.mark.parametrize(
    "layout", [{}, {"pulse_interval_s": 0.025}, {"interval_s": 0.5}, {"interval_s": 2.5, "pulses": 1}]
)
def test_standard_errors_and_noise_sd_are_those_of_evoked_amplitudes(
    make_timing, make_regular, make_traces, shape, layout, memory
):
    rng = np.random.default_rng(5)
    trials = 40
    timing = make_timing(
        make_regular(trials=trials, jitter=rng, **layout),
        n_frames=int(100 * trials * layout.get("interval_s", 1.0)) + 100,
    )
    truth = releases(rng, (20, trials, layout.get("pulses", 2)))
    traces = make_traces(truth, timing=timing, shape=shape, rng=rng, noise=0.08, memory=memory, bleach_s=60.0)
    found = fit(traces, baseline=true_baseline(traces))
    z = (found.amplitude - truth) / found.amplitude_se
    assert np.sqrt(np.mean(z**2)) == pytest.approx(1.0, abs=0.08)
    error = np.sqrt(np.mean((found.amplitude - truth)[:, :, 0] ** 2))
    assert np.sqrt(np.mean(found.noise_sd**2)) == pytest.approx(error, rel=0.1)
    assert np.std(found.noise_sd) / np.mean(found.noise_sd) < 0.15
    assert (found.correlation.order > 0) == (memory > 0)
    if "gaps" in found.noise_from:
        null_z = found.null_amplitude / found.null_se
        assert np.sqrt(np.nanmean(null_z**2)) == pytest.approx(1.0, abs=0.08)
        assert np.nanmean(null_z) == pytest.approx(0.0, abs=0.12)


def test_errors_follow_the_brightness_as_it_bleaches(make_timing, make_regular, make_traces, shape):
    rng = np.random.default_rng(6)
    timing = make_timing(make_regular(trials=60, jitter=rng), n_frames=6100)
    truth = np.zeros((20, 60, 2))
    traces = make_traces(truth, timing=timing, shape=shape, rng=rng, noise=0.05, bleach_s=25.0)
    found = fit(traces)
    early, late = (
        np.sqrt(np.mean((found.amplitude / found.amplitude_se)[:, part] ** 2)) for part in (slice(15), slice(45, 60))
    )
    assert early == pytest.approx(1.0, abs=0.1)
    assert late == pytest.approx(1.0, abs=0.1)
    assert np.mean(found.amplitude_se[:, 45:]) > 2.0 * np.mean(found.amplitude_se[:, :15])


def test_noise_sd_is_unmoved_by_spontaneous_releases(make_timing, make_regular, make_traces, shape):
    timing = make_timing(make_regular(trials=60), n_frames=6100)
    sds = []
    for rate in (0, 8):
        rng = np.random.default_rng(7)
        events = [(b, t, 0.4) for b in range(10) for t in np.random.default_rng(b).uniform(0.1, 60, rate)]
        traces = make_traces(np.zeros((10, 60, 2)), timing=timing, shape=shape, rng=rng, noise=0.08, events=events)
        sds.append(np.mean(fit(traces).noise_sd))
    assert sds[1] == pytest.approx(sds[0], rel=0.06)


def test_noise_beyond_the_scatter_of_frames_is_seen_on_the_null_amplitudes(
    make_timing, make_regular, make_traces, shape
):
    rng = np.random.default_rng(8)
    timing = make_timing(make_regular(trials=60, interval_s=1.5), n_frames=9100)
    traces = make_traces(np.zeros((12, 60, 2)), timing=timing, shape=shape, rng=rng, noise=0.05)
    # A slow rhythm as long as a response, which no prediction from four frames accounts for.
    time_s = timing.frame_start_s
    wander = np.sqrt(2) * 0.05 * np.sin(2 * np.pi * (time_s / 0.37 + np.cumsum(rng.normal(0, 0.01, time_s.size))))
    traces.f = traces.f + traces.f0 * wander * rng.choice([-1, 1], (12, 1))
    found = fit(traces)
    z = found.amplitude / found.amplitude_se
    assert np.sqrt(np.mean(z**2)) == pytest.approx(1.0, abs=0.2)


def test_missing_frames_cost_only_the_pulses_that_need_them(make_timing, make_regular, make_traces, shape):
    rng = np.random.default_rng(9)
    timing = make_timing(make_regular(trials=20, pulse_interval_s=0.2), n_frames=2100)
    truth = releases(rng, (3, 20, 2), p=0.6)
    traces = make_traces(truth, timing=timing, shape=shape, rng=rng, noise=0.02)
    at = np.searchsorted(timing.frame_start_s, timing.stimulus_s, side="right") - 1
    traces.used[at[4, 0] - 1 : at[4, 0] + 18] = False  # the first response is gone
    traces.used[at[9, 1] + 1] = False  # one frame of many
    traces.f[1, at[12, 0] - 60 : at[12, 1] + 60] = np.nan  # one bouton's trial is gone
    traces.f[:, ~traces.used] = 1e7
    found = fit(traces)
    missing = np.zeros((3, 20, 2), dtype=bool)
    missing[:, 4, 0] = True
    missing[1, 12, :] = True
    assert np.array_equal(np.isnan(found.amplitude), missing)
    assert np.nanmax(np.abs(found.amplitude - truth)) < 0.15
    usual = np.nanmedian(found.amplitude_se)
    assert np.all(found.amplitude_se[0, 9, 1] > 1.02 * usual)


def test_unusable_f0_leaves_counts_only(make_timing, make_regular, make_traces, shape):
    rng = np.random.default_rng(10)
    timing = make_timing(make_regular(trials=40), n_frames=4100)
    truth = releases(rng, (2, 40, 2), p=0.6)
    traces = make_traces(truth, timing=timing, shape=shape, rng=rng, noise=0.05)
    traces.f[1] -= traces.f0[1] + 50.0
    baseline = traces.baseline()
    assert baseline.usable.tolist() == [True, False]
    found = fit(traces, baseline=baseline)
    assert np.isnan(found.amplitude[1]).all()
    assert np.isnan(found.noise_sd[1])
    assert np.isfinite(found.amplitude_counts).all()
    at = np.searchsorted(timing.frame_start_s, timing.stimulus_s, side="right") - 1
    error = found.amplitude_counts[1] - truth[1] * traces.f0[1, at]
    assert np.std(error) == pytest.approx(found.noise_sd_counts[1], rel=0.35)
    assert np.mean(error) == pytest.approx(0.0, abs=15.0)


def test_a_bouton_without_any_frame_is_nan_and_spoils_nothing(make_timing, make_regular, make_traces, shape):
    rng = np.random.default_rng(11)
    timing = make_timing(make_regular(trials=20), n_frames=2100)
    traces = make_traces(releases(rng, (2, 20, 2)), timing=timing, shape=shape, rng=rng, noise=0.05)
    alone = fit(traces).amplitude[0]
    traces.f[1] = np.nan
    found = fit(traces)
    assert np.isnan(found.amplitude[1]).all()
    assert np.isnan(found.amplitude_counts[1]).all()
    assert np.isnan(found.noise_sd[1])
    assert found.amplitude[0] == pytest.approx(alone, abs=0.01)


def test_scale_and_order_of_boutons_do_not_matter(make_timing, make_regular, make_traces, shape):
    rng = np.random.default_rng(12)
    timing = make_timing(make_regular(trials=30), n_frames=3100, row_time_s=5e-5)
    traces = make_traces(
        releases(rng, (4, 30, 2)), timing=timing, shape=shape, rng=rng, noise=0.05, y_px=[0, 40, 40, 90]
    )
    first = fit(traces)
    order = np.array([2, 0, 3, 1])
    traces.f, traces.f0, traces.y_px = 7.0 * traces.f[order], 7.0 * traces.f0[order], traces.y_px[order]
    second = fit(traces)
    assert second.amplitude == pytest.approx(first.amplitude[order], rel=1e-6, abs=1e-9)
    assert second.noise_sd == pytest.approx(first.noise_sd[order], rel=1e-6)
    assert second.noise_sd_counts == pytest.approx(7.0 * first.noise_sd_counts[order], rel=1e-6)


@pytest.mark.parametrize("decay_s", [0.06, 0.8])
def test_standard_errors_are_those_of_the_dense_solution(make_timing, make_regular, decay_s):
    course = ResponseShape(latency_s=0.0, rise_s=0.005, decay_s=decay_s)
    timing = make_timing(make_regular(trials=25, interval_s=0.6), n_frames=1700)
    usable = np.ones(1700, dtype=bool)
    usable[[100, 101, 500]] = False
    design = build_design(
        windows=plan_trial_windows(timing=timing, tail_s=rest_s(course), baseline_s=None),
        timing=timing,
        shape=course,
        offset_s=0.002,
        usable=usable,
        slope=True,
        correlation=white(),
    )
    dense = design.matrix.toarray()
    inverse = np.linalg.inv(dense.T @ dense)
    assert design.standard_errors().ravel() == pytest.approx(np.sqrt(np.diag(inverse)), rel=1e-4)
    y = np.random.default_rng(13).normal(size=(dense.shape[0], 2))
    assert design.solve(y).reshape(-1, 2) == pytest.approx(np.linalg.lstsq(dense, y, rcond=None)[0], abs=1e-6)


def test_f0_is_read_without_the_tails_of_crowded_trials(make_timing, make_regular, make_traces):
    rng = np.random.default_rng(14)
    slow = ResponseShape(latency_s=0.0, rise_s=0.01, decay_s=1.5)
    timing = make_timing(make_regular(trials=40, interval_s=2.0, pulses=1), n_frames=8100)
    truth = releases(rng, (6, 40, 1), p=0.5)
    traces = make_traces(truth, timing=timing, shape=slow, rng=rng, noise=0.02)
    assert np.mean(traces.baseline().f0 / traces.f0) > 1.05
    found = measure_responses(
        traces.f,
        timing=timing,
        y_px=traces.y_px,
        used=traces.used,
        shape=slow,
        baseline_method="bleaching",
        baseline_s=None,
        percentile=10.0,
        running_s=5.0,
        slope=False,
    )
    assert found.shape_from == "protocol"
    assert np.mean(found.baseline.f0 / traces.f0) == pytest.approx(1.0, abs=0.02)
    assert np.sum(found.amplitudes.amplitude * truth) / np.sum(truth**2) == pytest.approx(1.0, abs=0.03)
