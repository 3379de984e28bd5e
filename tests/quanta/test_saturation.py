"""Undoing a reporter's static non-linearity."""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import saturate, undo_saturation

FORMS = [(1.0, None), (1.0, 0.2), (2.0, 0.1), (3.0, 0.05), (0.7, 0.3)]


@pytest.mark.parametrize(("hill", "rest_share"), FORMS)
def test_undoing_what_the_reporter_does_gives_the_response_back(hill, rest_share):
    linear = np.linspace(-0.3, 12, 60).reshape(3, 20)
    shown = saturate(linear, max_dff=3.0, hill=hill, rest_share=rest_share)
    undone = undo_saturation(shown, max_dff=3.0, hill=hill, rest_share=rest_share)
    np.testing.assert_allclose(undone.dff, linear, atol=1e-9)
    assert undone.n_above == 0
    assert undone.reason == ""
    assert np.all(shown < 3.0)


@pytest.mark.parametrize(("hill", "rest_share"), FORMS)
def test_slope_is_the_derivative(hill, rest_share):
    shown, step = np.linspace(0.05, 2.6, 40), 1e-6
    up, down = (
        undo_saturation(shown + s, max_dff=3.0, hill=hill, rest_share=rest_share).dff for s in (step, -step)
    )  # fmt: skip
    slope = undo_saturation(shown, max_dff=3.0, hill=hill, rest_share=rest_share).slope
    np.testing.assert_allclose(slope, (up - down) / (2 * step), rtol=1e-5)


@pytest.mark.parametrize(("hill", "rest_share"), FORMS)
def test_small_responses_are_left_alone(hill, rest_share):
    undone = undo_saturation([1e-6, -0.2, 0.0], max_dff=3.0, hill=hill, rest_share=rest_share)
    np.testing.assert_allclose(undone.dff, [1e-6, -0.2, 0.0], rtol=1e-5)
    np.testing.assert_allclose(undone.slope, 1.0, rtol=1e-5)


def test_hyperbola():
    assert saturate(1.5, max_dff=3.0, hill=1.0, rest_share=None) == pytest.approx(1.5 / (1 + 1.5 / 3.0))


def test_hill_equation_of_the_share_bound():
    hill, rest, max_dff = 2.0, 0.1, 3.0
    at_rest = (rest / (1 - rest)) ** (1 / hill)
    concentration = at_rest * np.array([1.0, 1.5, 4.0])
    bound = concentration**hill / (1 + concentration**hill)
    shown = max_dff * (bound - rest) / (1 - rest)
    linear = undo_saturation(shown, max_dff=max_dff, hill=hill, rest_share=rest).dff
    np.testing.assert_allclose(linear / linear[1], (concentration - at_rest) / (concentration[1] - at_rest), atol=1e-12)


def test_what_reaches_the_ceiling_is_nan_and_counted():
    undone = undo_saturation([0.5, 2.0, 2.5, np.nan], max_dff=2.0, hill=1.0, rest_share=None)
    np.testing.assert_array_equal(np.isnan(undone.dff), [False, True, True, True])
    assert undone.n_above == 2
    assert "2 of 3 values reach max_dff = 2" in undone.reason


def test_noise_grows_by_the_slope():
    rng = np.random.default_rng(1)
    shown = 1.2 + rng.normal(0, 0.01, 20_000)
    undone = undo_saturation(shown, max_dff=3.0, hill=1.0, rest_share=None)
    expected = 0.01 * undo_saturation(1.2, max_dff=3.0, hill=1.0, rest_share=None).slope
    assert undone.dff.std() == pytest.approx(expected, rel=0.03)


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"max_dff": 0.0}, "max_dff must be greater than 0"),
        ({"hill": -1.0}, "hill must be greater than 0"),
        ({"hill": 2.0}, "needs rest_share"),
        ({"rest_share": 1.0}, "between 0 and 1"),
    ],
)
def test_impossible_reporters_are_refused(given, words):
    for function in (saturate, undo_saturation):
        with pytest.raises(InputError, match=words):
            function([0.1], **({"max_dff": 3.0, "hill": 1.0, "rest_share": None} | given))
