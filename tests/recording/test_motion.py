"""Movement against recordings of known movement, and against the least error that photon noise allows."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.recording import light_at_rest, measure_drift, measure_light, movie_from_array, no_drift
from napari_boutonrelease.recording.random_walk import smooth_random_walk
from napari_boutonrelease.recording.registration import Reference

OFFSET, GAIN = 100.0, 2.0


class Axon:
    """Mean photons of a winding axon with boutons, wherever the sample has moved."""

    def __init__(self, rng, *, n_y=48, n_x=120, bouton=30.0, axon=8.0, background=3.0, sigma_px=1.4):
        self.shape, self.background, self.sigma_px = (n_y, n_x), background, sigma_px
        x = np.concatenate([np.arange(-8, n_x + 8, 0.5), np.linspace(8, n_x - 8, 14) + rng.uniform(-2, 2, 14)])
        y = n_y / 2 + n_y / 4 * np.sin(x / 25.0)
        self.y, self.x = y, x
        self.photons = np.full(x.size, axon * 0.5 / (2.5 * 1.4))
        self.photons[-14:] = bouton * rng.uniform(0.5, 1.5, 14)
        self.photons *= (1.4 / sigma_px) ** 2  # light is spread out of focus, not lost

    def image(self, dy=0.0, dx=0.0, *, doubled=()):
        photons = self.photons.copy()
        photons[-14:][list(doubled)] *= 2.0
        along_y = np.exp(-0.5 * ((np.arange(self.shape[0]) - self.y[:, None] - dy) / self.sigma_px) ** 2)
        along_x = np.exp(-0.5 * ((np.arange(self.shape[1]) - self.x[:, None] - dx) / self.sigma_px) ** 2)
        return self.background + (along_y * photons[:, None]).T @ along_x

    def least_error(self, light=1.0):
        """Cramér-Rao bound of dy and dx for one frame at `light` times the photons, the image being known."""
        slope_y = (self.image(0.05, 0) - self.image(-0.05, 0)) / 0.1
        slope_x = (self.image(0, 0.05) - self.image(0, -0.05)) / 0.1
        slopes = np.stack([slope_y.ravel(), slope_x.ravel()])
        information = light * (slopes / self.image().ravel()) @ slopes.T
        return np.sqrt(np.diag(np.linalg.inv(information)))


def record(rng, axon, drift, *, light=None, doubled=None, extra=None):
    """Counts (frame, y, x) of an axon that drifts, with photon noise, less light in the end and other fibres' light."""
    light = np.ones(len(drift)) if light is None else light
    frames = np.empty((len(drift), *axon.shape), dtype=np.uint16)
    for k, (dy, dx) in enumerate(drift):
        expected = light[k] * axon.image(dy, dx, doubled=() if doubled is None else doubled[k])
        expected = expected if extra is None else expected + extra[k]
        frames[k] = np.rint(OFFSET + GAIN * rng.poisson(expected))
    return frames


def measured(array, *, max_shift_px=8.0, block_frames=128):
    movie = movie_from_array(array)
    light = measure_light(movie, camera_offset=OFFSET, block_frames=200)
    return measure_drift(movie, light=light, max_shift_px=max_shift_px, block_frames=block_frames)


def error_of(drift, truth):
    """Root mean square error along y and x over the used frames, whatever the place of the reference."""
    error = np.stack([drift.dy_px, drift.dx_px], axis=1)[drift.used] - truth[drift.used]
    return np.sqrt(np.mean((error - error.mean(axis=0)) ** 2, axis=0))


def slow(n):
    t = np.linspace(0, 1, n)
    return np.stack([2.0 * np.sin(5 * t), 1.5 * np.cos(7 * t)], axis=1)


@pytest.fixture
def rng():
    return np.random.default_rng(31)


@pytest.mark.parametrize("photons", [0.1, 1.0, 5.0])
def test_single_frames_reach_the_bound_of_photon_noise(rng, photons):
    """Every frame moves on its own, so that nothing is to be gained from its neighbours."""
    axon = Axon(rng, bouton=30 * photons, axon=8 * photons, background=3 * photons)
    truth = rng.normal(0.0, 1.0, (500, 2))
    drift = measured(record(rng, axon, truth))
    assert drift.used.all()
    assert (error_of(drift, truth) < 1.2 * axon.least_error() + 0.001).all()
    assert drift.noise_px == pytest.approx(np.sqrt(np.mean(axon.least_error() ** 2)), rel=0.25)


def test_slow_drift_is_known_better_than_from_one_frame(rng):
    axon = Axon(rng, bouton=6, axon=1.6, background=0.6)
    truth = slow(800)
    assert (error_of(measured(record(rng, axon, truth)), truth) < 0.5 * axon.least_error()).all()


def test_jumps_bleaching_and_changing_background(rng):
    axon = Axon(rng)
    truth = slow(800)
    truth[300:] += [4.0, -3.0]
    truth[500:520] += [-5.0, 2.0]
    light = np.exp(-np.log(2.0) * np.linspace(0, 1, 800))
    x = np.arange(axon.shape[1])
    rolling = [3.0 * (1.0 + np.sin(x / 40.0 + k / 30.0)) for k in range(800)]
    drift = measured(record(rng, axon, truth, light=light, extra=rolling))
    assert drift.used.all()
    assert (error_of(drift, truth) < 1.3 * axon.least_error(0.5)).all()
    error = np.stack([drift.dy_px, drift.dx_px], axis=1) - truth
    assert np.abs(error - np.median(error, axis=0)).max() < 0.15


@pytest.mark.parametrize("photons", [1, 10])
def test_boutons_that_flash_hardly_move_the_frame(rng, photons):
    axon = Axon(rng, bouton=30 * photons, axon=8 * photons, background=3 * photons)
    truth = np.zeros((600, 2))
    doubled = [range(k // 30 % 4, 14, 4) if k % 30 < 8 else () for k in range(600)]
    drift = measured(record(rng, axon, truth, doubled=doubled))
    flashing = np.array([len(spots) > 0 for spots in doubled])
    for shift in (drift.dy_px, drift.dx_px):
        assert abs(shift[flashing].mean() - shift[~flashing].mean()) < 0.01
        assert np.abs(shift).max() < 0.02
    assert drift.used.all()


def test_drift_is_told_in_the_documented_sense_and_centred(rng):
    axon = Axon(rng)
    truth = np.where(np.arange(300)[:, None] < 100, [[2.0, -1.5]], [[0.0, 0.0]])
    drift = measured(record(rng, axon, truth))
    np.testing.assert_allclose([drift.dy_px[:100].mean(), drift.dx_px[:100].mean()], [2.0, -1.5], atol=0.02)
    assert np.median(drift.dy_px[drift.used]) == pytest.approx(0.0, abs=1e-12)
    assert np.median(drift.dx_px[drift.used]) == pytest.approx(0.0, abs=1e-12)
    inside = (slice(4, -4), slice(4, -4))
    np.testing.assert_allclose(drift.reference[inside], OFFSET + GAIN * axon.image()[inside], atol=4.0)


def test_frames_that_do_not_match_are_not_used(rng):
    axon, out_of_focus = Axon(rng), Axon(np.random.default_rng(31), sigma_px=6.0)
    truth = slow(400)
    array = record(rng, axon, truth)
    array[200:220] = record(rng, out_of_focus, truth[200:220])
    array[50] = record(rng, axon, truth[50:51], light=np.zeros(1))[0]
    drift = measured(array)
    bad = np.zeros(400, dtype=bool)
    bad[200:220], bad[50] = True, True
    np.testing.assert_array_equal(drift.used, ~bad)
    assert drift.match[bad].max() < 0.5
    assert drift.match[~bad].min() > 0.7
    between = np.stack([drift.dy_px, drift.dx_px], axis=1) - truth
    assert np.abs(between - np.median(between, axis=0)).max() < 0.25


def test_nothing_to_hold_on_to_means_no_correction(rng):
    drift = measured(rng.poisson(200.0, (300, 40, 60)).astype(np.uint16))
    assert not drift.corrected
    assert drift.used.all()
    np.testing.assert_array_equal(drift.dy_px, 0.0)
    np.testing.assert_array_equal(drift.dx_px, 0.0)


@pytest.mark.parametrize("angle", [0.0, 0.6])
def test_a_straight_axon_tells_movement_across_it_only(rng, angle):
    y, x = np.mgrid[0:48, 0:64].astype(float)
    across = np.array([np.cos(angle), np.sin(angle)])
    truth = slow(400)
    place = (y - 24) * across[0] + (x - 32) * across[1]
    expected = 2 + 30 * np.exp(-((place - (truth @ across)[:, None, None]) ** 2) / 4.0)
    drift = measured((100 + 2 * rng.poisson(expected)).astype(np.uint16))
    found = np.stack([drift.dy_px, drift.dx_px], axis=1)
    assert drift.used.all()
    error = (found - truth) @ across
    assert np.sqrt(np.mean((error - error.mean()) ** 2)) < 0.02
    assert np.abs(found @ [-across[1], across[0]]).max() < 0.02


def test_a_still_dim_sample_is_left_still(rng):
    """Raw shifts would scatter by a tenth of a pixel here and add more noise than they remove."""
    axon = Axon(rng, bouton=1.5, axon=0.4, background=0.15)
    drift = measured(record(rng, axon, np.zeros((800, 2))))
    assert axon.least_error().min() > 0.08
    assert max(np.abs(drift.dy_px).max(), np.abs(drift.dx_px).max()) < 0.05


def test_dead_saturated_and_missing_pixels_do_not_hold_the_frame(rng):
    axon = Axon(rng)
    truth = slow(300)
    array = record(rng, axon, truth).astype(np.float32)
    array[:, 20, ::7] = 100.0
    array[:, 30, 40] = np.nan
    array[100] = np.nan
    drift = measured(array)
    assert not drift.used[100]
    assert drift.used.sum() == 299
    assert (error_of(drift, truth) < 1.2 * axon.least_error()).all()
    assert np.isfinite(drift.reference).all()


def test_a_large_image_uses_its_informative_pixels_only(rng):
    axon = Axon(rng, n_y=200, n_x=240, bouton=10, axon=3, background=1)
    truth = rng.normal(0.0, 1.0, (120, 2))
    assert (error_of(measured(record(rng, axon, truth)), truth) < 1.25 * axon.least_error()).all()


def test_short_tiny_and_dark_recordings_do_not_fail(rng):
    for array in (rng.poisson(20, (2, 30, 30)), rng.poisson(20, (30, 4, 50)), np.zeros((20, 16, 16))):
        drift = measured(array.astype(np.uint16))
        assert drift.dy_px.shape == (len(array),)
        assert np.isfinite(drift.dy_px).all()
        assert not drift.corrected


@pytest.mark.parametrize("tremble_px", [0.0, 0.1, 0.3])
def test_the_gain_of_a_trembling_sample(rng, tremble_px):
    movie = movie_from_array(record(rng, Axon(rng), slow(600) + rng.normal(0, tremble_px, (600, 2))))
    light = measure_light(movie, camera_offset=OFFSET, block_frames=200)
    drift = measure_drift(movie, light=light, max_shift_px=8.0, block_frames=200)
    at_rest = light_at_rest(movie, light=light, drift=drift)
    assert at_rest.gain == pytest.approx(GAIN, rel=0.05)
    assert at_rest.gain_lo < at_rest.gain < at_rest.gain_hi
    if tremble_px == 0.3:
        assert light.gain > 1.3 * GAIN  # what it looks like
    assert light_at_rest(movie, light=light, drift=no_drift(light=light)) is light


def test_no_drift_keeps_good_frames(rng):
    movie = movie_from_array(record(rng, Axon(rng), np.zeros((60, 2)), light=np.arange(60) != 7))
    light = measure_light(movie, camera_offset=OFFSET, block_frames=50)
    drift = no_drift(light=light)
    np.testing.assert_array_equal(drift.used, np.arange(60) != 7)
    np.testing.assert_array_equal(drift.dx_px, 0.0)
    assert drift.reference is light.mean_image


def test_settings_out_of_range_are_refused(rng):
    movie = movie_from_array(rng.poisson(20, (20, 16, 16)).astype(np.uint16))
    light = measure_light(movie, camera_offset=0.0, block_frames=20)
    with pytest.raises(InputError, match="max_shift_px must be greater than 0 px"):
        measure_drift(movie, light=light, max_shift_px=0.0, block_frames=10)
    with pytest.raises(InputError, match="block_frames must be 1 or more"):
        measure_drift(movie, light=light, max_shift_px=3.0, block_frames=0)


def test_shift_of_a_photograph_found_as_an_independent_program_finds_it():
    """Guizar-Sicairos et al. 2008: the photograph moved by (-22.4, 13.32) px in the Fourier domain."""
    from scipy.ndimage import fourier_shift, gaussian_filter
    from skimage import data
    from skimage.registration import phase_cross_correlation

    photograph = gaussian_filter(data.camera().astype(float), 1.0)
    moved = np.real(np.fft.ifft2(fourier_shift(np.fft.fft2(photograph), (-22.4, 13.32))))
    theirs, _, _ = phase_cross_correlation(photograph, moved, upsample_factor=100)
    np.testing.assert_allclose(theirs, (22.4, -13.32))
    inside = np.zeros(photograph.shape, dtype=bool)
    inside[40:-40, 40:-40] = True  # what left the image on one side came back on the other
    reference = Reference(
        image=photograph, variance=np.ones_like(photograph), known=inside, usable=inside, directions=np.eye(2)
    )
    dy, dx = reference.find(moved[None], max_shift_px=30.0)
    fit = reference.locate(moved[None], dy=dy, dx=dx, max_shift_px=30.0)
    np.testing.assert_allclose([fit.dy_px[0], fit.dx_px[0]], -theirs, atol=0.01)


def test_walk_with_a_jump_and_a_gap(rng):
    truth = np.cumsum(rng.normal(0, 0.01, 600))
    truth[250:] += 3.0
    seen = truth + rng.normal(0, 0.1, 600)
    known = np.ones(600, dtype=bool)
    known[400:410], seen[400:410] = False, 50.0
    smooth = smooth_random_walk(seen, np.full(600, 0.1), known=known)
    assert np.sqrt(np.mean((smooth - truth) ** 2)) < 0.05
    assert abs(smooth[249] - truth[249]) < 0.15
    assert abs(smooth[250] - truth[250]) < 0.15


def test_fast_movement_is_not_smoothed_away(rng):
    truth = rng.normal(0, 1.0, 400)
    seen = truth + rng.normal(0, 0.05, 400)
    smooth = smooth_random_walk(seen, np.full(400, 0.05), known=np.ones(400, dtype=bool))
    assert np.sqrt(np.mean((smooth - truth) ** 2)) < 0.06


def test_an_unknown_walk_stays_at_zero():
    np.testing.assert_array_equal(smooth_random_walk(np.ones(5), np.ones(5), known=np.zeros(5, dtype=bool)), 0.0)
