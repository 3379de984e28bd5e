import numpy as np
import pytest

from napari_boutonrelease.response_shape import ResponseShape
from napari_boutonrelease.responses import ASSUMED_SHAPE, fit_amplitudes, fit_response_shape


def estimate(traces, *, start=None, slow_component=True):
    return fit_response_shape(
        traces.f,
        baseline=traces.baseline(),
        timing=traces.timing,
        y_px=traces.y_px,
        used=traces.used,
        start=start,
        slow_component=slow_component,
    )


def scale_of(traces, truth, shape):
    """Factor by which the amplitudes come out too large with an estimated shape."""
    found = fit_amplitudes(
        traces.f,
        baseline=traces.baseline(),
        timing=traces.timing,
        y_px=traces.y_px,
        shape=shape,
        used=traces.used,
        baseline_s=None,
        slope=False,
    )
    return np.nansum(found.amplitude * truth) / np.sum(truth**2)


@pytest.mark.parametrize(
    ("course", "row_time_s"),
    [
        (ResponseShape(latency_s=0.001, rise_s=0.002, decay_s=0.06), 0.0),
        (ResponseShape(latency_s=0.001, rise_s=0.002, decay_s=0.06), 1e-4),
        (ResponseShape(latency_s=0.002, rise_s=0.001, decay_s=0.02), 0.0),
        (ResponseShape(latency_s=0.004, rise_s=0.01, decay_s=0.15), 0.0),
    ],
)
def test_shape_is_recovered_and_amplitudes_with_it(make_timing, make_regular, make_traces, course, row_time_s):
    rng = np.random.default_rng(1)
    timing = make_timing(make_regular(trials=60, jitter=rng), n_frames=6100, row_time_s=row_time_s)
    truth = rng.binomial(2, 0.4, (8, 60, 2)) * 0.4
    traces = make_traces(truth, timing=timing, shape=course, rng=rng, noise=0.06, y_px=np.arange(8) // 2 * 20)
    found = estimate(traces)
    assert found.shape_from == "recording"
    assert found.boutons.tolist() == list(range(8))
    assert found.shape.slow_fraction == 0
    assert found.slow_p > 1e-4
    for name in ("latency", "rise", "decay"):
        error = getattr(found.shape, f"{name}_s") - getattr(course, f"{name}_s")
        assert abs(error) < 4 * getattr(found, f"{name}_se_s") + 1e-5
    assert found.decay_se_s < 0.03 * course.decay_s
    assert scale_of(traces, truth, found.shape) == pytest.approx(1.0, abs=0.03)


def test_standard_errors_cover_the_truth(make_timing, make_regular, make_traces, shape):
    z = []
    for seed in range(25):
        rng = np.random.default_rng(seed)
        timing = make_timing(make_regular(trials=20, jitter=rng), n_frames=2100)
        traces = make_traces(rng.binomial(2, 0.4, (4, 20, 2)) * 0.4, timing=timing, shape=shape, rng=rng, noise=0.06)
        found = estimate(traces, slow_component=False)
        z.append((found.shape.decay_s - shape.decay_s) / found.decay_se_s)
    assert np.sqrt(np.mean(np.square(z))) == pytest.approx(1.0, abs=0.55)
    assert np.abs(np.mean(z)) < 0.75


def test_a_slow_second_decay_is_found_where_there_is_one(make_timing, make_regular, make_traces):
    rng = np.random.default_rng(2)
    course = ResponseShape(latency_s=0.001, rise_s=0.002, decay_s=0.06, slow_fraction=0.25, slow_decay_s=0.4)
    timing = make_timing(make_regular(trials=30, interval_s=2.0, jitter=rng), n_frames=6100)
    truth = rng.binomial(2, 0.5, (8, 30, 2)) * 0.4
    traces = make_traces(truth, timing=timing, shape=course, rng=rng, noise=0.05)
    found = estimate(traces)
    assert found.slow_p < 1e-10
    assert found.shape.slow_fraction == pytest.approx(0.25, abs=0.06)
    assert found.shape.slow_decay_s == pytest.approx(0.4, rel=0.25)
    assert scale_of(traces, truth, found.shape) == pytest.approx(1.0, abs=0.04)


def test_frames_too_long_for_the_rise_leave_it_near_the_reference(make_timing, make_regular, make_traces, shape):
    rng = np.random.default_rng(3)
    timing = make_timing(make_regular(trials=60), n_frames=6100)  # every stimulus at the very start of a frame
    truth = rng.binomial(2, 0.4, (8, 60, 2)) * 0.4
    traces = make_traces(truth, timing=timing, shape=shape, rng=rng, noise=0.08)
    found = estimate(traces)
    assert 0 <= found.shape.latency_s < 0.006
    assert 0.0005 < found.shape.rise_s < 0.006
    assert scale_of(traces, truth, found.shape) == pytest.approx(1.0, abs=0.08)


@pytest.mark.parametrize("start", [None, ResponseShape(latency_s=0.0, rise_s=0.02, decay_s=5.0)])
def test_a_decay_of_many_seconds_is_found_from_a_rough_start(make_timing, make_regular, make_traces, start):
    rng = np.random.default_rng(4)
    course = ResponseShape(latency_s=0.0, rise_s=0.05, decay_s=15.0)
    timing = make_timing(
        make_regular(trials=9, interval_s=30.0, pulses=1, first_s=5.0), n_frames=2800, frame_interval_s=0.1
    )
    truth = rng.binomial(2, 0.6, (8, 9, 1)) * 0.4
    traces = make_traces(truth, timing=timing, shape=course, rng=rng, noise=0.05, bleach_s=1e9)
    found = estimate(traces, start=start)
    assert found.shape.decay_s == pytest.approx(15.0, rel=0.15)


def test_silence_gives_the_stated_shape(make_timing, make_regular, make_traces, shape):
    rng = np.random.default_rng(5)
    timing = make_timing(make_regular(trials=40, jitter=rng), n_frames=4100)
    traces = make_traces(np.zeros((15, 40, 2)), timing=timing, shape=shape, rng=rng, noise=0.08)
    found = estimate(traces)
    assert found.shape_from == "assumed"
    assert found.shape == ASSUMED_SHAPE
    assert found.boutons.size == 0
    assert np.isnan(found.decay_se_s)
    stated = ResponseShape(latency_s=0.0, rise_s=0.01, decay_s=0.2)
    assert estimate(traces, start=stated).shape == stated


def test_one_rarely_releasing_bouton_among_silent_ones_is_enough(make_timing, make_regular, make_traces, shape):
    rng = np.random.default_rng(6)
    timing = make_timing(make_regular(trials=60, jitter=rng), n_frames=6100)
    truth = np.zeros((10, 60, 2))
    truth[3] = rng.binomial(1, 0.2, (60, 2)) * 0.5
    traces = make_traces(truth, timing=timing, shape=shape, rng=rng, noise=0.06)
    found = estimate(traces)
    assert found.boutons.tolist() == [3]
    assert found.clear_z[3] > 6 > np.max(np.delete(found.clear_z, 3))
    assert found.shape.decay_s == pytest.approx(0.06, rel=0.25)


def test_correlated_noise_is_not_taken_for_responses(make_timing, make_regular, make_traces, shape):
    rng = np.random.default_rng(7)
    timing = make_timing(make_regular(trials=40, jitter=rng), n_frames=4100)
    traces = make_traces(np.zeros((10, 40, 2)), timing=timing, shape=shape, rng=rng, noise=0.06, memory=0.5)
    found = estimate(traces)
    assert found.shape_from == "assumed"
    assert found.correlation.order >= 1


def test_nothing_to_work_on(make_timing, make_regular, make_traces, shape):
    timing = make_timing(make_regular(trials=10), n_frames=1100)
    traces = make_traces(np.zeros((2, 10, 2)), timing=timing, shape=shape)
    traces.f[:] = np.nan
    found = estimate(traces)
    assert found.shape_from == "assumed"
    assert found.clear_z.tolist() == [0.0, 0.0]


def test_a_movie_that_ends_with_the_response_does_not_tell_its_decay(make_timing, make_regular, make_traces, shape):
    """Two frames of a response hardly say how fast it falls: better assumed, and said to be."""
    timing = make_timing(make_regular(trials=1, pulses=1, first_s=0.5), n_frames=53)
    traces = make_traces(np.full((1, 1, 1), 0.3), timing=timing, shape=shape, rng=np.random.default_rng(1), noise=0.02)
    found = estimate(traces)
    assert found.clear_z[0] > 6
    assert found.shape_from == "assumed"
    assert found.shape == ASSUMED_SHAPE
    assert np.isnan(found.decay_se_s)
