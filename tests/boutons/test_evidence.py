import numpy as np
import pytest

from napari_boutonrelease.boutons import matched_filter, mixture_evidence, release_posterior, standardise
from napari_boutonrelease.boutons.evidence import RELEASE_PROBABILITIES, RELEASE_SIZES_SD, robust_variance

from .conftest import SIGMA_PX, spot


def test_evidence_is_the_largest_log_likelihood_ratio_on_the_grid():
    rng = np.random.default_rng(1)
    z = rng.standard_normal((37, 6, 5)).astype(np.float32)
    z[:9] += 1.5
    ratios = [
        np.log1p(p * np.expm1(q * z.astype(float) - q * q / 2)).sum(axis=0)
        for p in RELEASE_PROBABILITIES
        for q in RELEASE_SIZES_SD
    ]
    mean = np.maximum(z.mean(axis=0), 0)
    expected = np.max([*ratios, 0.5 * len(z) * mean**2], axis=0)
    np.testing.assert_allclose(mixture_evidence(z), expected, rtol=1e-4, atol=1e-4)


def test_rare_releases_leave_more_evidence_than_their_mean():
    z = np.zeros((80, 1), dtype=np.float32)
    z[:4] = 4.5
    mean_alone = 0.5 * 80 * z.mean() ** 2
    assert mixture_evidence(z).item() > 4 * mean_alone


def test_one_spark_is_no_bouton_however_large():
    spark, releases = np.zeros((2, 80, 1), dtype=np.float32)
    spark[3] = 500.0
    releases[:5] = 5.0
    assert mixture_evidence(spark).item() < 8
    assert mixture_evidence(releases).item() > 25


def test_negative_responses_are_no_evidence():
    assert mixture_evidence(np.full((40, 3), -4.0, dtype=np.float32)) == pytest.approx(0.0)


def test_posterior_tells_releases_from_silence():
    rng = np.random.default_rng(2)
    released = rng.random(200) < 0.3
    posterior, p, q = release_posterior(rng.standard_normal(200) + 5.0 * released)
    assert np.mean((posterior > 0.5) == released) > 0.97
    assert p == pytest.approx(released.mean(), abs=0.02)
    assert q == pytest.approx(5.0, abs=0.45)  # 4 standard errors of a mean of 60 releases


def test_matched_filter_reads_a_spot_in_units_of_its_noise():
    rng = np.random.default_rng(3)
    shape, sd = (48, 48), 2.0
    noise = sd * rng.standard_normal((400, *shape)).astype(np.float32)
    maps = np.concatenate([noise, 10 * spot(24, 24, shape=shape)[None].astype(np.float32)])
    z = matched_filter(maps, inverse_variance=np.full(shape, sd**-2), spot_sigma_px=SIGMA_PX)
    ideal = 10 * np.sqrt(np.sum(spot(24, 24, shape=shape) ** 2)) / sd
    noise_sd = z[:-1, 12:36, 12:36].std()
    assert noise_sd == pytest.approx(0.95, abs=0.03)  # the local mean takes a twentieth
    assert 0.95 * ideal <= z[-1, 24, 24] / noise_sd <= ideal
    assert np.unravel_index(z[-1].argmax(), shape) == (24, 24)


def test_matched_filter_is_a_weighted_sum_above_a_weighted_mean():
    rng = np.random.default_rng(4)
    maps = rng.standard_normal((2, 40, 50)).astype(np.float32)
    inverse_variance = rng.uniform(0.5, 2.0, (40, 50))
    inverse_variance[10:14, 20:30] = 0.0
    z = matched_filter(maps, inverse_variance=inverse_variance, spot_sigma_px=SIGMA_PX)
    rows, columns = np.mgrid[0:40, 0:50]
    box, reach = round(6 * SIGMA_PX), int(3.5 * SIGMA_PX + 0.5)

    def level(image, y, x):
        near = (abs(rows - y) <= box) & (abs(columns - x) <= box)
        return np.sum((image * inverse_variance)[near]) / np.sum(inverse_variance[near])

    for y, x in ((20, 25), (2, 3), (38, 30), (15, 24)):
        profile = np.exp(-((rows - y) ** 2 + (columns - x) ** 2) / (2 * SIGMA_PX**2))
        profile[(abs(rows - y) > reach) | (abs(columns - x) > reach)] = 0.0
        for image, read in zip(maps, z, strict=True):
            above = image - [[level(image, a, b) if profile[a, b] else 0.0 for b in range(50)] for a in range(40)]
            weighted = profile * inverse_variance
            expected = np.sum(weighted * above) / np.sqrt(np.sum(weighted * profile))
            assert read[y, x] == pytest.approx(expected, rel=0.01, abs=0.003)
    assert (z[:, 10:14, 20:30] == 0).all()


@pytest.mark.parametrize("n_maps", [1, 2, 31, 40])
def test_robust_variance_is_that_of_the_median(n_maps):
    rng = np.random.default_rng(5)
    maps, factor = rng.standard_normal((n_maps, 30, 70)).astype(np.float32), rng.uniform(0.5, 2.0, n_maps)
    plain = (1.482602 * np.median(np.abs(maps / factor[:, None, None]), axis=0)) ** 2
    np.testing.assert_allclose(robust_variance(maps, noise_factor=factor), plain, rtol=1e-5)


def test_matched_filter_does_not_see_a_flash():
    z = matched_filter(
        np.full((1, 40, 40), 7.0, np.float32), inverse_variance=np.ones((40, 40)), spot_sigma_px=SIGMA_PX
    )
    assert np.abs(z).max() < 1e-4


def standardised(stack, *, exclude):
    return standardise(
        evoked=stack.evoked,
        null=stack.null,
        evoked_factor=stack.evoked_factor,
        null_factor=stack.null_factor,
        mean_image=stack.mean_image,
        null_is_silent=True,
        spot_sigma_px=SIGMA_PX,
        exclude=exclude,
    )


def test_noise_is_one_in_bright_and_dark_places(axon):
    rng = np.random.default_rng(4)
    scene = axon(rng, p=(0, 0), n_trials=300, n_null=60)
    stack = scene.stack(rng)
    excluded = np.zeros(scene.shape, dtype=bool)
    excluded[:, :4] = True
    maps = standardised(stack, exclude=excluded)
    places = np.round(scene.y).astype(int), np.round(scene.x).astype(int)
    assert maps.evoked[:, *places].std() == pytest.approx(1.0, abs=0.06)
    assert maps.evoked[:, :20, 4:].std() == pytest.approx(1.0, abs=0.06)
    assert np.all(maps.evoked[:, excluded] == 0)
    assert np.all(np.isinf(maps.pixel_variance[excluded]))


def test_a_flickering_place_is_judged_by_its_own_noise(axon):
    rng = np.random.default_rng(5)
    scene = axon(rng, p=(0, 0))
    stack = scene.stack(rng)
    flicker = 40 * spot(12, 80, shape=scene.shape).astype(np.float32)
    for maps in (stack.evoked, stack.null):
        maps += rng.standard_normal((len(maps), 1, 1)).astype(np.float32) * flicker
    z = standardised(stack, exclude=np.zeros(scene.shape, dtype=bool))
    assert z.evoked[:, 12, 80].std() < 1.6
