"""Too little data gives NaN, never a crash nor a warning."""

import numpy as np
import pytest

from napari_boutonrelease.responses import call_releases, detect_spontaneous, measure_responses, measure_rundown


def measure(traces, *, method="bleaching", slope=False, shape=None):
    found = measure_responses(
        traces.f,
        timing=traces.timing,
        y_px=traces.y_px,
        used=traces.used,
        shape=shape,
        baseline_method=method,
        baseline_s=None,
        percentile=10.0,
        running_s=2.0,
        slope=slope,
    )
    fit = found.amplitudes
    spontaneous = detect_spontaneous(
        traces.f,
        baseline=found.baseline,
        fit=fit,
        timing=traces.timing,
        y_px=traces.y_px,
        shape=found.shape,
        used=traces.used,
        threshold_sd=2.5,
        false_per_bouton=0.1,
    )
    calls = call_releases(fit.amplitude, amplitude_se=fit.amplitude_se, noise_sd=fit.noise_sd, threshold_sd=2.5)
    measure_rundown(fit.amplitude, called=calls.called)
    assert fit.amplitude.shape == (traces.f.shape[0], *traces.timing.stimulus_s.shape)
    assert spontaneous.per_min.shape == (traces.f.shape[0],)
    return found


@pytest.mark.parametrize("method", ["bleaching", "trial", "percentile"])
@pytest.mark.parametrize(
    ("stimulus_s", "n_frames"),
    [
        ([[0.5]], 100),
        ([[0.0]], 30),
        ([[0.02, 0.03]], 5),
        ([[0.5, 0.505], [1.0, 1.0001]], 150),
        ([[0.95]], 100),
        ([[0.999]], 100),
        ([[np.nan, np.nan], [0.5, np.nan]], 100),
        ([[np.nan]], 50),
        ([[0.0101 * i] for i in range(1, 40)], 60),
    ],
)
def test_odd_protocols(make_timing, make_traces, shape, stimulus_s, n_frames, method):
    timing = make_timing(stimulus_s, n_frames=n_frames)
    rng = np.random.default_rng(1)
    truth = np.full((2, *timing.stimulus_s.shape), 0.3)
    traces = make_traces(truth, timing=timing, shape=shape, rng=rng, noise=0.05)
    for slope in (False, True):
        measure(traces, method=method, slope=slope)


@pytest.mark.parametrize("method", ["bleaching", "trial", "percentile"])
def test_odd_traces(make_timing, make_regular, make_traces, shape, method):
    timing = make_timing(make_regular(trials=8), n_frames=850)
    rng = np.random.default_rng(2)
    traces = make_traces(np.zeros((7, 8, 2)), timing=timing, shape=shape, rng=rng, noise=0.05)
    traces.f[1] = np.nan
    traces.f[2] = 0.0
    traces.f[3] = 500.0
    traces.f[4] = -200.0
    traces.f[5, 400:] = np.nan
    traces.f[6] *= 1e12
    found = measure(traces, method=method)
    assert np.isfinite(found.amplitudes.noise_sd[0])
    assert np.isnan(found.amplitudes.amplitude[[1, 2, 4]]).all()
    assert np.isfinite(found.amplitudes.amplitude[5, :3]).all()
    assert np.isnan(found.amplitudes.amplitude[5, 5:]).all()


def test_no_boutons(make_timing, make_regular, make_traces, shape):
    timing = make_timing(make_regular(trials=5), n_frames=550)
    traces = make_traces(np.zeros((1, 5, 2)), timing=timing, shape=shape)
    traces.f, traces.f0, traces.y_px = traces.f[:0], traces.f0[:0], traces.y_px[:0]
    found = measure(traces)
    assert found.amplitudes.amplitude.shape == (0, 5, 2)
    assert found.amplitudes.noise_from == ()


def test_no_usable_frame(make_timing, make_regular, make_traces, shape):
    timing = make_timing(make_regular(trials=5), n_frames=550)
    traces = make_traces(np.zeros((2, 5, 2)), timing=timing, shape=shape)
    traces.used[:] = False
    found = measure(traces)
    assert np.isnan(found.amplitudes.amplitude).all()
    assert not found.baseline.usable.any()


def test_noise_free_traces(make_timing, make_regular, make_traces, shape):
    timing = make_timing(make_regular(trials=10), n_frames=1100)
    traces = make_traces(np.full((2, 10, 2), 0.5), timing=timing, shape=shape)
    found = measure(traces, shape=shape)
    assert found.amplitudes.amplitude == pytest.approx(np.full((2, 10, 2), 0.5), abs=0.01)
