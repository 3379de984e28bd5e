import numpy as np
import pytest

from napari_boutonrelease.responses import measure_baseline, plan_trial_windows, rest_s


@pytest.fixture
def protocol(make_timing, make_regular, shape):
    timing = make_timing(make_regular(trials=60), n_frames=6000)
    return timing, plan_trial_windows(timing=timing, tail_s=rest_s(shape), baseline_s=None)


def measure(f, protocol, method="bleaching", **changes):
    timing, windows = protocol
    options = {"used": np.ones(f.shape[1], dtype=bool), "percentile": 10.0, "running_s": 5.0} | changes
    return measure_baseline(f, timing=timing, windows=windows, method=method, **options)


def bleaching(time_s, kind):
    return {
        "constant": np.full_like(time_s, 800.0),
        "exponential": 300.0 + 700.0 * np.exp(-time_s / 25.0),
        "two exponentials": 200.0 + 500.0 * np.exp(-time_s / 4.0) + 500.0 * np.exp(-time_s / 60.0),
    }[kind]


@pytest.mark.parametrize("kind", ["constant", "exponential", "two exponentials"])
def test_bleaching_curves_are_recognised_and_followed(protocol, kind):
    rng = np.random.default_rng(1)
    truth = bleaching(protocol[0].frame_start_s, kind)
    f = truth + 20.0 * rng.normal(size=(20, 6000))
    baseline = measure(f, protocol)
    assert baseline.usable.all()
    assert sum(curve == kind for curve in baseline.curve) >= 12
    error = baseline.f0 - truth
    assert np.mean(np.abs(error[:, 50:5950])) < 3.0  # a trial's own mean, of 34 frames, would be off by 2.7
    assert np.mean(np.std(error, axis=1)) < 4.0
    assert np.all(baseline.f0_se > 0)


def test_dividing_by_the_curve_adds_no_noise_but_dividing_by_each_trials_mean_does(protocol):
    rng = np.random.default_rng(2)
    truth = bleaching(protocol[0].frame_start_s, "exponential")
    f = truth + 100.0 * rng.normal(size=(10, 6000))
    curve, trial = measure(f, protocol), measure(f, protocol, "trial")
    assert trial.curve == ("trial",) * 10
    relative = [np.std(baseline.f0 / truth - 1) for baseline in (curve, trial)]
    assert relative[0] < 0.4 * relative[1]


def test_a_rising_baseline_gets_the_smooth_curve(protocol):
    rng = np.random.default_rng(3)
    time_s = protocol[0].frame_start_s
    truth = 500.0 + 200.0 * np.sin(2 * np.pi * time_s / 50.0)
    baseline = measure(truth + 20.0 * rng.normal(size=(3, 6000)), protocol)
    assert baseline.curve == ("smooth",) * 3
    assert np.max(np.abs(baseline.f0 - truth)[:, 100:5900]) < 0.1 * 500


def test_spontaneous_releases_before_a_few_trials_hardly_raise_f0(protocol):
    rng = np.random.default_rng(4)
    f = 500.0 + 10.0 * rng.normal(size=(5, 6000))
    for trial in range(3, 60, 12):
        f[:, protocol[1].start[trial] + 5 : protocol[1].start[trial] + 20] += 200.0
    baseline = measure(f, protocol)
    assert np.abs(np.mean(baseline.f0) - 500.0) < 3.0


def test_the_running_percentile_is_raised_to_the_mean_of_the_noise(protocol):
    rng = np.random.default_rng(5)
    f = 500.0 + 50.0 * rng.normal(size=(20, 6000))
    baseline = measure(f, protocol, "percentile")
    assert np.mean(baseline.f0) == pytest.approx(500.0, abs=2.0)
    assert np.mean(np.percentile(f, 10, axis=1)) < 440.0
    spread = np.std(baseline.f0[:, 100])
    assert baseline.f0_se[0] == pytest.approx(spread, rel=0.6)


def test_f0_within_its_noise_is_flagged_and_dff_left_out(protocol):
    rng = np.random.default_rng(6)
    f = np.array([[1.0], [-40.0], [900.0]]) + 60.0 * rng.normal(size=(3, 6000))
    baseline = measure(f, protocol)
    assert baseline.usable.tolist() == [False, False, True]
    dff = baseline.dff(f)
    assert np.isnan(dff[:2]).all()
    assert np.isfinite(dff[2]).all()
    assert np.isfinite(baseline.f0).all()


def test_unused_frames_and_boutons_without_any_frame(protocol):
    rng = np.random.default_rng(7)
    f = 500.0 + 10.0 * rng.normal(size=(2, 6000))
    f[1] = np.nan
    used = np.ones(6000, dtype=bool)
    used[1000:1400] = False
    f[0, 1000:1400] = 1e6
    for method in ("bleaching", "trial", "percentile"):
        baseline = measure(f, protocol, method, used=used)
        assert np.abs(baseline.f0[0] - 500.0).max() < 25.0
        assert baseline.usable.tolist() == [True, False]


def test_few_trials_get_a_constant(make_timing, shape):
    timing = make_timing([[0.5], [1.5]], n_frames=300)
    windows = plan_trial_windows(timing=timing, tail_s=rest_s(shape), baseline_s=None)
    baseline = measure(np.full((1, 300), 400.0), (timing, windows))
    assert baseline.curve == ("constant",)
    assert baseline.f0 == pytest.approx(np.full((1, 300), 400.0))


def test_a_stimulus_at_the_very_start_leaves_the_percentile(make_timing, shape):
    timing = make_timing([[0.0]], n_frames=300)
    windows = plan_trial_windows(timing=timing, tail_s=rest_s(shape), baseline_s=None)
    rng = np.random.default_rng(8)
    baseline = measure(400.0 + rng.normal(size=(1, 300)), (timing, windows), running_s=1.0)
    assert baseline.curve == ("percentile",)
    assert np.mean(baseline.f0) == pytest.approx(400.0, abs=1.0)
