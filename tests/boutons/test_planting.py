"""Boutons planted in the noise of places are found as often as those that a whole detection looks for."""

from dataclasses import replace

import numpy as np
import pytest

from napari_boutonrelease.boutons import PlantedBoutons, plant_boutons

from .conftest import SIGMA_PX, Scene, spot

SHAPE = (96, 160)
N_TRIALS = 60


def strong_axon(rng):
    x = np.arange(12.0, 150, 18) + rng.uniform(-1, 1, 8)
    y = 48 + rng.uniform(-1, 1, 8)
    return Scene(y=y, x=x, p=np.full(8, 0.5), q_sd=np.full(8, 5.0), shape=SHAPE, n_trials=N_TRIALS, n_null=N_TRIALS)


def like(q, **changes):
    options = {
        "n_sites": np.array([1]),
        "q": np.array([0.5]),
        "f0_counts": np.array([2 * q]),
        "q_cv": 0.3,
        "pulse_ratio": np.ones(1),
        "brightness": np.ones(N_TRIALS),
        "shown": lambda dff: dff,
        "gain": 1.0,
        "spot_sigma_px": SIGMA_PX,
        "variance_per_count": 0.0,
        "light_share": 0.0,
        "spot_share": 0.0,
    }
    return PlantedBoutons(**options | changes)


def add_boutons(stack, *, p, q, rng):
    """Add boutons, well apart, to the evoked maps."""
    y = np.repeat([14.0, 82.0], 5) + rng.uniform(-3, 3, 10)
    x = np.tile(np.linspace(16, 144, 5), 2) + rng.uniform(-3, 3, 10)
    evoked = stack.evoked.copy()
    for one in range(10):
        heights = q * (rng.random(N_TRIALS) < p) * rng.gamma(1 / 0.09, 0.09, N_TRIALS)
        evoked += np.multiply.outer(heights, spot(y[one], x[one], shape=SHAPE)).astype(np.float32)
    return replace(stack, evoked=evoked), y, x


def found_share(p, *, find, seeds, q_sd=4.0):
    """Share that whole detections find, and that of planted ones in the same recordings."""
    n_found, planted = 0, []
    for seed in seeds:
        rng = np.random.default_rng(seed)
        stack = strong_axon(rng).stack(rng)
        q = q_sd / np.sqrt(np.sum(spot(40, 40, shape=SHAPE) ** 2) / (0.25 * 50))
        more, y, x = add_boutons(stack, p=p, q=q, rng=rng)
        detection = find(more, seed=seed)
        by_response = np.array([how != "shape" for how in detection.found_by])
        apart = np.hypot(detection.y_px[by_response, None] - y, detection.x_px[by_response, None] - x)
        n_found += int(np.sum(apart.min(axis=0) < 2))
        planted.append(plant_boutons(detection.quiet, like(q), p_release=[p], n_planted=300, rng=rng)[0] / 300)
    return n_found / (10 * len(seeds)), float(np.mean(planted))


def test_planted_are_found_as_often_as_by_whole_detections(find):
    whole, planted = found_share(0.06, find=find, seeds=range(4))
    assert abs(whole - planted) < 3.3 * np.sqrt(planted * (1 - planted) / 40)
    assert 0.2 < planted < 0.9


@pytest.mark.validation
@pytest.mark.parametrize("p", [0.02, 0.05, 0.1, 0.2])
@pytest.mark.parametrize("q_sd", [3.0, 4.0])
def test_planted_are_found_as_often_as_by_many_whole_detections(p, q_sd, find):
    whole, planted = found_share(p, find=find, seeds=range(100, 120), q_sd=q_sd)
    assert abs(whole - planted) < 0.03 + 3.3 * np.sqrt(max(planted * (1 - planted), 0.01) / 200)


@pytest.fixture(scope="module")
def quiet_and_q():
    from napari_boutonrelease.boutons import detect_boutons

    from .conftest import SPACING_PX

    rng = np.random.default_rng(3)
    scene = strong_axon(rng)
    detection = detect_boutons(
        scene.stack(rng),
        spot_sigma_px=SIGMA_PX,
        spacing_px=SPACING_PX,
        false_discovery=0.05,
        shape_candidates=True,
        exclude=np.zeros(SHAPE, dtype=bool),
        rng=np.random.default_rng(4),
        progress=None,
    )
    return scene, detection.quiet, 4.0 / np.sqrt(np.sum(spot(40, 40, shape=SHAPE) ** 2) / (0.25 * 50))


def share(quiet, boutons, p=0.07):
    return plant_boutons(quiet, boutons, p_release=[p], n_planted=500, rng=np.random.default_rng(5))[0] / 500


def test_quiet_places_keep_away_from_found_boutons_and_hold_unit_noise(quiet_and_q):
    scene, quiet, _ = quiet_and_q
    apart = np.hypot(quiet.y_px[:, None] - scene.y, quiet.x_px[:, None] - scene.x)
    assert apart.min() > 10
    assert len(quiet.y_px) == 240
    assert quiet.z.std() == pytest.approx(1.0, abs=0.05)
    assert quiet.fitted.std() == pytest.approx(1.0, abs=0.08)


def test_more_are_found_the_more_often_and_the_brighter_they_respond(quiet_and_q):
    _, quiet, q = quiet_and_q
    counts = plant_boutons(quiet, like(q), p_release=[0.0, 0.03, 0.1, 0.5], n_planted=300, rng=np.random.default_rng(6))
    assert counts[0] <= 6
    assert counts[0] < counts[1] < counts[2] <= counts[3] == 300
    assert share(quiet, like(0.7 * q)) < share(quiet, like(q)) < share(quiet, like(1.4 * q))


def test_light_at_rest_makes_boutons_harder_to_find(quiet_and_q):
    _, quiet, q = quiet_and_q
    assert share(quiet, like(q, variance_per_count=40.0)) < share(quiet, like(q)) - 0.1


def test_where_the_image_shows_boutons_less_is_needed(quiet_and_q):
    _, quiet, q = quiet_and_q
    assert share(quiet, like(q, spot_share=1.0)) > share(quiet, like(q))


def test_places_that_are_active_by_themselves_need_more(quiet_and_q):
    _, quiet, q = quiet_and_q
    active = replace(quiet, by_itself=np.full_like(quiet.by_itself, 20.0))
    assert share(active, like(q)) < share(quiet, like(q)) - 0.1


def test_a_later_pulse_that_always_releases_gives_a_rare_bouton_away(quiet_and_q):
    _, quiet, q = quiet_and_q
    pairs = replace(quiet, evoked_pulse=np.arange(N_TRIALS) % 2)
    rare, facilitated = like(q, pulse_ratio=np.array([1.0, 1.0])), like(q, pulse_ratio=np.array([1.0, 10.0]))
    assert share(pairs, facilitated) > share(pairs, rare) + 0.2
