"""Gain, noise, bleaching, and the pixels and frames not to trust, against recordings of known light."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.recording import measure_light, movie_from_array

OFFSET = 100.0


def electrons(n_y=32, n_x=96, lowest=2.0, highest=60.0):
    """Mean electrons per pixel: a few bright spots on a slope."""
    y, x = np.mgrid[0:n_y, 0:n_x].astype(float)
    image = lowest + 6.0 * x / n_x
    for k in range(6):
        image += highest * np.exp(-((y - n_y / 2 - 4 * np.sin(k)) ** 2 + (x - 8 - 15 * k) ** 2) / 5.0)
    return image


def record(rng, expected, *, gain=0.5, read_noise=1.0, dtype=np.uint16):
    """Counts of a camera without excess noise that sees `expected` electrons (frame, y, x)."""
    seen = rng.poisson(expected) + rng.normal(0.0, read_noise, expected.shape)
    return np.clip(np.rint(OFFSET + gain * seen), 0, np.iinfo(dtype).max).astype(dtype)


def light_of(array, *, offset=OFFSET, block_frames=200):
    return measure_light(movie_from_array(array), camera_offset=offset, block_frames=block_frames)


@pytest.fixture
def rng():
    return np.random.default_rng(20)


def test_published_photon_transfer_table(rng):
    levels = np.array([50, 200, 1000, 2000, 8000])
    expected = np.broadcast_to(np.repeat(levels, 40)[:, None], (200, 12)).astype(float)
    light = light_of(record(rng, np.broadcast_to(expected, (400, 200, 12)), read_noise=4.0))
    assert light.gain == pytest.approx(0.5, rel=0.01)
    assert light.gain_lo < 0.5 < light.gain_hi
    assert light.gain_hi - light.gain_lo < 0.03
    np.testing.assert_allclose(
        light.variance_at([125, 200, 600, 1100, 4100]), np.array([16.5, 54, 254, 504, 2004]) + 1 / 12, rtol=0.04
    )
    assert light.read_noise_counts == pytest.approx(np.sqrt(4.0 + 1 / 12), rel=0.25)


def test_multiplying_electrons_doubles_the_gain(rng):
    expected = np.broadcast_to(electrons(), (600, 32, 96))
    counts = np.rint(OFFSET + rng.gamma(np.maximum(rng.poisson(expected), 1e-9), 3.0)).astype(np.uint16)
    assert light_of(counts).gain == pytest.approx(2 * 3.0, rel=0.04)


def test_responses_hardly_touch_the_noise(rng):
    rest = electrons()
    course = np.zeros(1200)
    for start in range(40, 1200, 80):
        course[start : start + 40] += np.exp(-np.arange(40) / 5.0)
    light = light_of(record(rng, rest + course[:, None, None] * np.maximum(rest - 9.0, 0.0)))
    assert light.gain == pytest.approx(0.5, rel=0.04)
    assert not light.bad_frame.any()


def test_bleaching_by_half(rng):
    fading = np.exp(-np.log(2.0) * np.linspace(0, 1, 1000))
    light = light_of(record(rng, electrons() * fading[:, None, None]))
    assert light.bleaching == pytest.approx(1 - fading[-50:].mean() / fading[:50].mean(), abs=0.01)
    assert light.gain == pytest.approx(0.5, rel=0.03)
    assert not light.bad_frame.any()


def test_alike_pixels_give_no_gain_but_a_variance(rng):
    array = rng.normal(50.0, 3.0, (300, 24, 24)).astype(np.float32)
    light = light_of(array, offset=None)
    assert np.isnan([light.gain, light.gain_lo, light.gain_hi, light.read_noise_counts]).all()
    np.testing.assert_allclose(light.variance_at([10.0, 50.0]), 9.0, rtol=0.03)
    assert not light.offset_known
    assert light.offset_counts == 0.0


@pytest.mark.parametrize(
    "array", [np.zeros((40, 16, 16), np.uint16), np.full((40, 16, 16), np.nan), np.ones((2, 5, 5))]
)
def test_nothing_to_measure_does_not_fail(array):
    light = light_of(array, block_frames=10)
    assert np.isnan(light.gain)
    assert light.bad_frame.all()
    assert (light.variance_at(light.frame_mean) > 0).all()


def test_bad_frames_are_told_apart(rng):
    expected = np.tile(electrons(), (500, 1, 1))
    expected[60:63] = 0.0  # shutter closed
    expected[210:] = np.where(np.arange(290)[:, None, None] < 120, 0.0, expected[210:])  # and for a long time
    expected[100] += 20.0  # stimulation light over the whole field
    expected[400:402] += 40.0
    array = record(rng, expected).astype(np.float32)
    array[150] = 0.0
    array[170, 3, 4] = np.nan
    light = light_of(array, block_frames=128)
    should = np.full(500, "", dtype=object)
    should[60:63], should[210:330] = "light off", "light off"
    should[100], should[400:402] = "flash", "flash"
    should[150], should[170] = "blank", "not finite"
    assert light.bad_reason == tuple(should)
    np.testing.assert_array_equal(light.bad_frame, should != "")
    np.testing.assert_allclose(light.mean_image, OFFSET + 0.5 * electrons(), atol=1.6)
    assert light.gain == pytest.approx(0.5, rel=0.05)


@pytest.mark.parametrize("offset", [OFFSET, None])
def test_light_is_missed_with_and_without_a_known_offset(rng, offset):
    expected = np.tile(electrons(), (400, 1, 1))
    expected[::7] *= 0.02
    light = light_of(record(rng, expected), offset=offset)
    np.testing.assert_array_equal(light.bad_frame, np.arange(400) % 7 == 0)


@pytest.mark.parametrize("decay_frames", [2.0, 6.0])
@pytest.mark.parametrize("offset", [OFFSET, None])
def test_no_response_is_taken_for_a_flash(rng, decay_frames, offset):
    rest = electrons()
    course = np.zeros(400)
    for start in range(30, 400, 50):
        course[start : start + 20] += np.exp(-np.arange(20) / decay_frames)
    everywhere = 1.0 + 1.5 * course[:, None, None]  # out-of-focus fibres respond, too
    assert not light_of(record(rng, rest * everywhere), offset=offset).bad_frame.any()


def test_ceilings_of_the_detector_and_dead_pixels(rng):
    array = record(rng, np.broadcast_to(electrons() * 10, (400, 32, 96)), gain=4.0)
    array[:, 10:12, 20:23] = 5000  # a speck brighter than a 12-bit camera can tell
    array = np.minimum(array, 4095)
    array[:, 5, 5] = 77
    light = light_of(array)
    speck = np.zeros((32, 96), dtype=bool)
    speck[10:12, 20:23] = True
    assert not light.dead[~speck & (np.indices((32, 96)).sum(axis=0) != 10)].any()
    assert light.dead[5, 5]
    assert ((light.saturated | light.dead)[speck]).all()
    assert light.gain == pytest.approx(4.0, rel=0.05)


def test_a_pixel_that_touches_the_ceiling_now_and_then_is_saturated(rng):
    expected = np.tile(electrons(), (600, 1, 1))
    expected[::50, 16, 40] = 900.0
    light = light_of(record(rng, expected, dtype=np.uint8))
    assert light.saturated[16, 40]
    assert light.saturated.sum() == 1


def test_counts_of_a_few_photons_have_no_ceiling(rng):
    light = light_of(rng.poisson(0.3, (500, 32, 32)).astype(np.uint16), offset=0.0)
    assert not light.saturated.any()
    assert not light.dead.any()


def test_a_pixel_without_a_number_is_dead_and_frames_stay_good(rng):
    array = record(rng, np.broadcast_to(electrons(), (200, 32, 96))).astype(np.float32)
    array[:, 2, 3] = np.nan
    light = light_of(array)
    assert light.dead[2, 3]
    assert light.dead.sum() == 1
    assert not light.bad_frame.any()
    assert np.isfinite(light.frame_mean).all()


def test_the_block_size_changes_nothing_that_matters(rng):
    expected = np.tile(electrons(), (300, 1, 1))
    expected[99:101] += 30.0
    array = record(rng, expected)
    small, large = light_of(array, block_frames=50), light_of(array, block_frames=300)
    np.testing.assert_array_equal(small.bad_frame, large.bad_frame)
    np.testing.assert_allclose(small.mean_image, large.mean_image)
    assert small.gain == pytest.approx(large.gain, rel=0.03)


def test_progress_reaches_the_end(rng):
    seen = []
    movie = movie_from_array(record(rng, np.broadcast_to(electrons(), (50, 32, 96))))
    measure_light(movie, camera_offset=None, block_frames=20, progress=lambda done, total: seen.append((done, total)))
    assert seen == [(20, 50), (40, 50), (50, 50)]


def test_blocks_of_one_frame_are_refused():
    with pytest.raises(InputError, match="2 or more"):
        light_of(np.zeros((4, 8, 8)), block_frames=1)


@pytest.mark.parametrize("dtype", [np.uint8, np.uint16, np.int32, np.float32])
def test_means_are_exact_whatever_the_type_of_the_pixels(rng, dtype):
    array = record(rng, np.broadcast_to(electrons(n_y=37, n_x=61), (90, 37, 61)), dtype=np.uint8).astype(dtype)
    light = light_of(array, block_frames=40)
    np.testing.assert_allclose(light.frame_mean, array.mean(axis=(1, 2), dtype=float), rtol=1e-12)
    np.testing.assert_allclose(light.mean_image, array.mean(axis=0, dtype=float), rtol=1e-12)


def test_some_of_the_pixels_and_pairs_of_a_large_movie_tell_its_noise(rng, monkeypatch):
    monkeypatch.setattr("napari_boutonrelease.recording.light._PAIR_PIXELS", 0)  # as of a movie too large to test
    expected = np.tile(electrons(n_y=32, n_x=96), (5, 2))
    light = light_of(np.stack([record(rng, expected) for _ in range(1000)]), block_frames=64)
    assert light.gain == pytest.approx(0.5, rel=0.02)
    assert light.gain_lo < 0.5 < light.gain_hi
    np.testing.assert_allclose(light.variance_at(OFFSET + 0.5 * np.array([5, 40])), [1.58, 10.3], rtol=0.05)
    assert light.typical_variance == pytest.approx(0.25 * (np.median(expected) + 1.0) + 1 / 12, rel=0.02)
