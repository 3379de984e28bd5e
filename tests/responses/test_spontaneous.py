import numpy as np
import pytest

from napari_boutonrelease.responses import detect_spontaneous, fit_amplitudes


def search(traces, *, false_per_bouton=0.1, threshold_sd=2.5):
    baseline = traces.baseline()
    common = {
        "baseline": baseline,
        "timing": traces.timing,
        "y_px": traces.y_px,
        "shape": traces.shape,
        "used": traces.used,
    }
    fit = fit_amplitudes(traces.f, baseline_s=None, slope=False, **common)
    return detect_spontaneous(traces.f, fit=fit, threshold_sd=threshold_sd, false_per_bouton=false_per_bouton, **common)


@pytest.fixture
def protocol(make_timing, make_regular):
    return make_timing(make_regular(trials=60, jitter=np.random.default_rng(0)), n_frames=6000)


def events_of(rng, n_boutons, n_each, timing):
    """Times that lie clear of stimuli, their tails and each other."""
    events = []
    for bouton in range(n_boutons):
        times = []
        while len(times) < n_each:
            at = rng.uniform(0.5, 59.0)
            if np.all(np.abs(at - np.array([*times, -9.0])) > 0.35) and not np.any(
                (timing.stimulus_s > at - 0.35) & (timing.stimulus_s < at + 0.15)
            ):
                times.append(at)
        events += [(bouton, at, 0.5) for at in times]
    return events


@pytest.mark.parametrize("memory", [0.0, 0.4])
def test_noise_feigns_as_many_releases_as_stated(protocol, make_traces, shape, memory):
    rng = np.random.default_rng(1)
    truth = rng.binomial(2, 0.3, (40, 60, 2)) * 0.3
    traces = make_traces(truth, timing=protocol, shape=shape, rng=rng, noise=0.08, memory=memory)
    found = search(traces, false_per_bouton=1.0)
    assert found.false_expected.sum() >= 35
    assert 15 < found.count.sum() < 65
    assert 15 < found.count_down.sum() < 65
    strict = search(traces, false_per_bouton=0.05)
    assert strict.count.sum() <= 9
    assert strict.threshold > found.threshold > 2.5


def test_releases_are_found_when_and_as_large_as_they_are(protocol, make_traces, shape):
    rng = np.random.default_rng(2)
    events = events_of(rng, 10, 8, protocol)
    truth = rng.binomial(2, 0.3, (10, 60, 2)) * 0.3
    traces = make_traces(truth, timing=protocol, shape=shape, rng=rng, noise=0.06, events=events)
    found = search(traces)
    hits = 0
    for bouton, at, _ in events:
        close = (found.bouton == bouton) & (np.abs(found.time_s - at) < 0.02)
        hits += np.count_nonzero(close)
    assert hits >= 78
    assert found.count.sum() <= 84
    assert np.mean(found.amplitude) == pytest.approx(0.5, abs=0.04)
    assert np.std(found.amplitude) < 2 * np.mean(found.amplitude_se)
    assert found.score == pytest.approx(found.amplitude / found.amplitude_se)
    assert np.all(np.diff(found.bouton) >= 0)


def test_the_rate_allows_for_the_time_observed_and_for_false_ones(protocol, make_traces, shape):
    rng = np.random.default_rng(3)
    per_min = 6.0
    events = [(b, t, 0.5) for b in range(30) for t in rng.uniform(0, 60, rng.poisson(per_min))]
    traces = make_traces(np.zeros((30, 60, 2)), timing=protocol, shape=shape, rng=rng, noise=0.06, events=events)
    found = search(traces)
    assert np.mean(found.per_min) == pytest.approx(per_min, rel=0.25)
    assert np.all((found.observed_s > 20) & (found.observed_s < 50))
    at_stimuli = np.array([np.any((protocol.stimulus_s < t) & (protocol.stimulus_s > t - 0.25)) for t in found.time_s])
    assert not at_stimuli.any()


def test_unused_frames_hide_no_more_than_themselves(protocol, make_traces, shape):
    rng = np.random.default_rng(4)
    traces = make_traces(np.zeros((2, 60, 2)), timing=protocol, shape=shape, rng=rng, noise=0.06)
    whole = search(traces).observed_s
    traces.used[rng.choice(6000, 60, replace=False)] = False
    traces.f[:, ~traces.used] = np.nan
    assert np.all(search(traces).observed_s > 0.9 * whole)
    traces.used[2000:4000] = False
    assert np.all(search(traces).observed_s < 0.75 * whole)


def test_no_time_without_stimuli_gives_no_rate(make_timing, make_regular, make_traces, shape):
    timing = make_timing(make_regular(trials=40, interval_s=0.2), n_frames=870)
    traces = make_traces(np.zeros((2, 40, 2)), timing=timing, shape=shape, rng=np.random.default_rng(5), noise=0.05)
    traces.used[:60] = False
    traces.used[-60:] = False
    found = search(traces)
    assert found.bouton.size == 0
    assert found.observed_s.tolist() == [0.0, 0.0]
    assert np.isnan(found.per_min).all()
