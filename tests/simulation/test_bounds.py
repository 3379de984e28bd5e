from dataclasses import replace

import numpy as np
import pytest

from napari_boutonrelease.simulation import (
    BoutonRecipe,
    Recipe,
    amplitude_limit,
    expected_profile,
    noise_variance,
    plan_recording,
    rest_image,
    simulate_recording,
)

BOUTON = BoutonRecipe(y_px=12.3, x_px=11.6, n_sites=1, p_site=0.0, q_dff=0.4, f0_photons=20.0)
STILL = Recipe(
    height_px=25,
    width_px=25,
    trials=1000,
    trial_interval_s=0.3,
    first_s=0.1,
    boutons=(BOUTON,),
    background_cv=0.0,
    bleached=0.0,
    drift_walk_px=0.0,
    drift_wave_px=0.0,
)
WINDOW = {"pulse": 0, "before_s": 0.1, "after_s": 0.2}


def observed_sd(simulation, *, offset, background):
    """SD of least-squares amplitudes of an observer who knows everything but the amplitude (and the nuisances)."""
    truth = simulation.truth
    y0, x0, profile = expected_profile(truth, 0, brim_px=3)
    h, w = profile.shape
    pixels = simulation.frames[:, y0 : y0 + h, x0 : x0 + w].reshape(truth.frame_start_s.size, -1).astype(float)
    rest = (100.0 + 2.0 * rest_image(truth))[y0 : y0 + h, x0 : x0 + w].ravel()
    weight = 1 / noise_variance(truth)[y0 : y0 + h, x0 : x0 + w].ravel()
    columns = [profile.ravel()] + ([np.ones(h * w)] if background else [])
    design = np.column_stack(columns)
    projector = np.linalg.solve(design.T * weight @ design, design.T * weight)
    trace = (pixels - rest) @ projector[0] / (2.0 * 20.0)
    frames = np.arange(30) + 30 * np.arange(1000)[:, None]
    decay = np.concatenate([np.zeros(10), np.exp(-np.arange(20) * 0.01 / 0.06)])
    # The response of a sudden onset, averaged over exposures, scaled as the reporter's peak 1.
    course = np.column_stack([decay] + ([np.ones(30)] if offset else []))
    return (trace[frames] @ np.linalg.pinv(course)[0]).std()


@pytest.fixture(scope="module")
def sharp():
    """A reporter that rises at once, so that its course can be written down without any integral."""
    recipe = replace(STILL, rise_s=1e-6, latency_s=0.0, jitter_s=0.0, exposure_s=1e-4)
    return simulate_recording(recipe, rng=np.random.default_rng(4))


@pytest.mark.parametrize(("offset", "background"), [(False, False), (True, False), (True, True)])
def test_no_observer_does_better_and_the_ideal_one_does_as_well(sharp, offset, background):
    limit = amplitude_limit(sharp.truth, 0, **WINDOW, offset=offset, background=background, neighbours=False)
    assert observed_sd(sharp, offset=offset, background=background) == pytest.approx(limit, rel=0.09)


def limit(recipe, **changes):
    truth = plan_recording(replace(recipe, trials=2), rng=np.random.default_rng(1))
    known = {"offset": False, "background": False, "neighbours": False}
    return amplitude_limit(truth, 0, **{**WINDOW, **known, **changes})


def test_every_unknown_raises_the_limit():
    near = replace(BOUTON, x_px=14.6)
    recipe = replace(STILL, boutons=(BOUTON, near))
    limits = [
        limit(recipe),
        limit(recipe, offset=True),
        limit(recipe, offset=True, background=True),
        limit(recipe, offset=True, background=True, neighbours=True),
    ]
    assert np.all(np.diff(limits) > 0)
    assert limits[3] > 1.05 * limits[2]


def test_four_times_the_light_halves_the_limit_without_read_noise():
    bright = replace(
        STILL, read_noise_e=0.0, photons=40.0, background_photons=12.0, boutons=(replace(BOUTON, f0_photons=80.0),)
    )
    faint = replace(STILL, read_noise_e=0.0)
    assert limit(bright) == pytest.approx(limit(faint) / 2)


def test_noise_of_a_multiplying_register_costs_the_square_root_of_two():
    assert limit(replace(STILL, read_noise_e=0.0, electron_multiplying=True)) == pytest.approx(
        np.sqrt(2) * limit(replace(STILL, read_noise_e=0.0))
    )


def test_a_pulse_that_no_trial_has_has_no_limit():
    assert np.isnan(limit(STILL, pulse=3))


def test_profile_is_cut_at_the_image_and_keeps_its_place():
    truth = plan_recording(replace(STILL, trials=1, boutons=(replace(BOUTON, y_px=2.0),)), rng=np.random.default_rng(1))
    y0, x0, patch = expected_profile(truth, 0)
    peak = np.unravel_index(np.argmax(patch), patch.shape)
    assert y0 == 0
    assert (y0 + peak[0], x0 + peak[1]) == (2, 12)
    assert rest_image(truth)[2, 12] > 18
