"""Which bouton of one recording is which of another."""

import numpy as np
import pytest

from napari_boutonrelease.comparison import match_boutons, matches_from_ids, measure_shift
from napari_boutonrelease.errors import InputError

SPOTS = np.array([(12.0, 15.0), (20.0, 33.0), (26.0, 52.0), (18.0, 70.0), (33.0, 84.0)])


def picture(spots, *, seed, shape=(48, 96), noise=1.0, light=60.0):
    """Boutons on an axon of diffuse light, as the mean of a recording shows them."""
    y, x = np.indices(shape)
    image = 100.0 + 20.0 * np.exp(-(((y - 24) / 15.0) ** 2))
    for row, column in spots:
        image = image + light * np.exp(-0.5 * ((y - row) ** 2 + (x - column) ** 2) / 1.6**2)
    return image + np.random.default_rng(seed).normal(0, noise, shape)


@pytest.mark.parametrize("shift", [(0.0, 0.0), (2.3, -4.65), (-6.1, 8.0)])
def test_a_shift_is_found_to_a_tenth_of_a_pixel(shift):
    found, likeness = measure_shift(picture(SPOTS, seed=1), picture(SPOTS + shift, seed=2))
    assert found == pytest.approx(shift, abs=0.1)
    assert likeness > 0.8


def test_images_of_other_sizes_are_laid_on_one_another():
    small = picture(SPOTS - [3.0, 2.0], seed=2, shape=(40, 90))
    found, _ = measure_shift(picture(SPOTS, seed=1), small)
    assert found == pytest.approx((-3.0, -2.0), abs=0.15)


def test_boutons_are_matched_through_movement_with_gaps_on_either_side(make_recording):
    moved = SPOTS - [-2.0, 3.0]
    there = moved[[4, 2, 1, 0]]  # another order, and bouton 4 is missing
    extra = np.array([[5.0, 50.0]])
    first = make_recording(position_px=SPOTS, mean_image=picture(SPOTS, seed=1))
    second = make_recording(
        name="second", position_px=np.concatenate([there, extra]), mean_image=picture(moved, seed=2)
    )
    matches = match_boutons([first, second], match_um=0.6)
    assert matches.row[:, 1].tolist() == [3, 2, 1, -1, 0]
    assert np.nanmax(matches.distance_px[:, 1]) < 0.2
    assert np.isnan(matches.distance_px[3, 1])
    assert matches.unmatched(1, 5).tolist() == [4]
    assert matches.unmatched(0, 5).tolist() == []


def test_a_far_bouton_does_not_pull_a_near_pair_apart(make_recording):
    first = make_recording(position_px=[(20.0, 30.0), (20.0, 34.0)], mean_image=picture(SPOTS, seed=1))
    second = make_recording(name="second", position_px=[(20.0, 34.1)], mean_image=picture(SPOTS, seed=2))
    assert match_boutons([first, second], match_um=0.6).row[:, 1].tolist() == [-1, 0]


def test_other_fields_and_other_pixels_are_refused(make_recording):
    first = make_recording(position_px=SPOTS, mean_image=picture(SPOTS, seed=1))
    elsewhere = make_recording(name="else", mean_image=np.random.default_rng(3).normal(100, 5, (48, 96)))
    with pytest.raises(InputError, match=r"mean images of first and else do not match \(correlation .*give the pairs"):
        match_boutons([first, elsewhere], match_um=0.6)
    coarse = make_recording(name="coarse", mean_image=picture(SPOTS, seed=1), pixel_size_um=0.4)
    with pytest.raises(InputError, match=r"pixel is 0.2 µm in first but 0.4 µm in coarse"):
        match_boutons([first, coarse], match_um=0.6)


def test_an_image_without_structure_is_like_nothing():
    flat = np.full((48, 96), 100.0)
    assert abs(measure_shift(flat, picture(SPOTS, seed=1))[1]) < 0.1
    nothing = np.full((48, 96), np.nan)
    assert measure_shift(nothing, picture(SPOTS, seed=1))[1] == 0.0


def test_pairs_made_by_eye_are_taken_as_they_are(make_recording):
    recordings = [make_recording(name=name, position_px=SPOTS) for name in ("a", "b", "c")]
    matches = matches_from_ids(recordings, np.array([[2, 5, 0], [4, 1, 4]]))
    assert matches.row.tolist() == [[0, -1, -1], [1, 4, -1], [2, -1, -1], [3, 0, 3], [4, -1, -1]]
    assert np.isnan(matches.likeness).all()


@pytest.mark.parametrize(
    ("ids", "message"),
    [([[1, 9]], r"b has no bouton 9"), ([[1, 2], [2, 2]], r"Bouton 2 of b comes twice in the table of pairs")],
)
def test_impossible_pairs_are_refused(make_recording, ids, message):
    recordings = [make_recording(name=name, position_px=SPOTS) for name in ("a", "b")]
    with pytest.raises(InputError, match=message):
        matches_from_ids(recordings, np.array(ids))
