import numpy as np
import pytest
from scipy.integrate import quad

from napari_boutonrelease.simulation import Recipe
from napari_boutonrelease.simulation.kinetics import Reporter, activity

SHAPES = [
    {"rise_s": 0.003, "decay_s": 0.06},
    {"rise_s": 0.05, "decay_s": 0.02},
    {"rise_s": 0.02, "decay_s": 6.0, "slow_fraction": 0.3, "slow_decay_s": 40.0},
]


def stated(time_s, *, rise_s, decay_s, slow_fraction=0.0, slow_decay_s=1.0):
    decay = (1 - slow_fraction) * np.exp(-time_s / decay_s) + slow_fraction * np.exp(-time_s / slow_decay_s)
    return (1 - np.exp(-time_s / rise_s)) * decay if time_s > 0 else 0.0


@pytest.mark.parametrize("shape", SHAPES)
def test_response_has_the_stated_course_and_peak_one(shape):
    reporter = Reporter(Recipe(**shape))
    times = np.linspace(-0.01, 5 * shape["decay_s"], 1001)
    height = reporter.height(times)
    peak = stated(reporter.peak_s, **shape)
    assert height == pytest.approx([stated(t, **shape) / peak for t in times], abs=1e-9)
    assert height.max() <= 1.0 + 1e-12
    assert reporter.height(reporter.peak_s) == pytest.approx(1.0)


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("begin", [-0.5, -0.4, 0.0, 0.3, 2.0])
def test_light_over_an_exposure_is_the_integral_of_the_course(shape, begin):
    exposure = 0.7 * shape["decay_s"]
    start = begin * exposure
    reporter = Reporter(Recipe(**shape))
    knots = [0.0] if start < 0 < start + exposure else None
    integral = quad(lambda t: float(reporter.height(t)), start, start + exposure, points=knots, epsabs=1e-12)[0]
    assert reporter.gathered(start, exposure_s=exposure) == pytest.approx(integral / exposure, rel=1e-7, abs=1e-10)


def brightness(saturation_dff, *, row_time_s=0.0):
    reporter = Reporter(Recipe(**SHAPES[0]))
    start_s = np.arange(40)[:, None] * 0.01 + row_time_s * np.arange(3)
    light = activity(
        reporter=reporter,
        release_s=np.array([0.0432, 0.11]),
        size_dff=np.array([0.5, 0.8]),
        start_s=start_s,
        exposure_s=0.008,
        saturation_dff=saturation_dff,
    )
    linear = lambda t: 0.5 * float(reporter.height(t - 0.0432)) + 0.8 * float(reporter.height(t - 0.11))  # noqa: E731
    return light, start_s, linear


@pytest.mark.parametrize("row_time_s", [0.0, 0.002])
def test_responses_of_vesicles_add_up_row_by_row(row_time_s):
    light, start_s, linear = brightness(None, row_time_s=row_time_s)
    for frame, row in [(3, 0), (4, 1), (5, 2), (11, 0), (12, 2), (30, 1)]:
        begin = start_s[frame, row]
        knots = [t for t in (0.0432, 0.11) if begin < t < begin + 0.008] or None
        assert light[frame, row] == pytest.approx(quad(linear, begin, begin + 0.008, points=knots)[0] / 0.008, abs=1e-8)


def test_a_saturating_reporter_compresses_at_every_instant():
    light, start_s, linear = brightness(1.5)
    compressed = lambda t: linear(t) / (1 + linear(t) / 1.5)  # noqa: E731
    for frame in (4, 5, 11, 12, 20):
        begin = start_s[frame, 0]
        assert light[frame, 0] == pytest.approx(quad(compressed, begin, begin + 0.008, limit=200)[0] / 0.008, rel=0.01)


def test_a_response_ends_when_it_is_no_longer_seen():
    reporter = Reporter(Recipe(**SHAPES[0]))
    assert reporter.height(reporter.duration_s) < 2e-6
