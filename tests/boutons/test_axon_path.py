"""An axon traced between clicks follows its light, and its length is right."""

from __future__ import annotations

import numpy as np
import pytest

from napari_boutonrelease.boutons import distance_along, trace_axon
from napari_boutonrelease.errors import InputError

WIDTH_PX = 3.0


def bow(n: int = 400) -> np.ndarray:
    """Half a circle of radius 40 px."""
    angle = np.linspace(0, np.pi, n)
    return np.column_stack([70 - 40 * np.sin(angle), 60 - 40 * np.cos(angle)])


def light_of(course: np.ndarray, *, shape=(100, 120), height=20.0, boutons=(), noise=2.0, seed=1) -> np.ndarray:
    rows, columns = np.mgrid[: shape[0], : shape[1]]
    distance = np.min(np.hypot(rows[..., None] - course[:, 0], columns[..., None] - course[:, 1]), axis=-1)
    sigma = WIDTH_PX / 2.355
    image = 100 + height * np.exp(-(distance**2) / (2 * sigma**2))
    for index in boutons:
        y, x = course[index]
        image += 10 * height * np.exp(-((rows - y) ** 2 + (columns - x) ** 2) / (2 * (1.3 * sigma) ** 2))
    return image + np.random.default_rng(seed).normal(0, noise, shape)


def length(path: np.ndarray) -> float:
    return float(np.hypot(*np.diff(path, axis=0).T).sum())


def test_path_follows_a_bow_instead_of_its_chord():
    course = bow()
    path = trace_axon(light_of(course, boutons=(80, 200, 320)), course[[0, -1]], width_px=WIDTH_PX)
    _, aside = distance_along(course, y_px=path[:, 0], x_px=path[:, 1])
    assert np.max(np.abs(aside)) < 2.2
    assert np.sqrt(np.mean(aside**2)) < 0.8
    assert length(path) == pytest.approx(np.pi * 40, rel=0.01)


def test_ends_are_the_clicks_and_points_are_a_pixel_apart():
    course = bow()
    clicks = course[[3, 390]] + 0.3
    path = trace_axon(light_of(course), clicks, width_px=WIDTH_PX)
    assert path[[0, -1]] == pytest.approx(clicks)
    assert np.hypot(*np.diff(path, axis=0).T).max() < 1.2


def test_a_click_between_decides_which_of_two_ways():
    upper, lower = bow(), np.column_stack([140 - bow()[:, 0], bow()[:, 1]])
    both = light_of(np.vstack([upper, lower]), shape=(140, 120))
    for course in (upper, lower):
        path = trace_axon(both, course[[0, 200, -1]], width_px=WIDTH_PX)
        _, aside = distance_along(course, y_px=path[:, 0], x_px=path[:, 1])
        assert np.max(np.abs(aside)) < 2.5


def test_a_brighter_axon_nearby_does_not_capture_the_path():
    dim, bright = bow(), np.column_stack([np.full(200, 95.0), np.linspace(0, 119, 200)])
    image = light_of(dim, height=20.0) + light_of(bright, height=60.0, noise=0.0)
    path = trace_axon(image, dim[[0, -1]], width_px=WIDTH_PX)
    assert path[:, 0].max() < 80


def test_straight_line_where_there_is_no_light_at_all():
    path = trace_axon(np.zeros((50, 60)), [(10, 10), (10, 40)], width_px=WIDTH_PX)
    assert path[:, 0] == pytest.approx(10.0)
    assert length(path) == pytest.approx(30.0)


def test_missing_pixels_do_not_stop_the_path():
    course = bow()
    image = light_of(course)
    image[30:33, 55:58] = np.nan
    path = trace_axon(image, course[[0, -1]], width_px=WIDTH_PX)
    assert np.isfinite(path).all()
    assert length(path) == pytest.approx(np.pi * 40, rel=0.05)


def test_places_that_make_no_path_are_refused():
    image = np.zeros((50, 60))
    with pytest.raises(InputError, match="two different points"):
        trace_axon(image, [(10, 10)], width_px=WIDTH_PX)
    with pytest.raises(InputError, match="two different points"):
        trace_axon(image, [(10, 10), (10, 10)], width_px=WIDTH_PX)
    with pytest.raises(InputError, match="outside the image of 50 x 60"):
        trace_axon(image, [(10, 10), (70, 10)], width_px=WIDTH_PX)
