import numpy as np
import pytest
from scipy.ndimage import gaussian_filter
from scipy.special import ndtr

from napari_boutonrelease.simulation.optics import Lattice, Spot


def brute_force(sigma_px, radius_px, y, x, *, half, fine=21):
    """Disc on a grid of `fine` points a pixel, blurred, summed over pixels."""
    axis = (np.arange((2 * half + 1) * fine) + 0.5) / fine - half - 0.5
    soft = 0.5 / fine
    distance = np.hypot(axis[:, None] - y, axis[None, :] - x)
    disc = np.clip((radius_px - distance) / (2 * soft) + 0.5, 0, 1)
    blurred = gaussian_filter(disc, sigma_px * fine, truncate=6)
    return blurred.reshape(2 * half + 1, fine, 2 * half + 1, fine).sum(axis=(1, 3)) / blurred.sum()


@pytest.mark.parametrize(("y", "x"), [(0.0, 0.0), (0.3, -0.45)])
def test_spot_is_a_disc_through_the_point_spread(y, x):
    spot = Spot(sigma_px=1.4, radius_px=1.7)
    y0, x0, patches = spot.patches(np.array([y]), np.array([x]))
    wanted = brute_force(1.4, 1.7, y, x, half=spot.reach_px)
    assert (y0[0], x0[0]) == (-spot.reach_px, -spot.reach_px)
    assert patches[0] / patches[0].sum() == pytest.approx(wanted, abs=2e-3 * wanted.max())


def test_spot_has_peak_one_on_a_pixel_and_the_same_light_anywhere():
    spot = Spot(sigma_px=1.4, radius_px=1.7)
    y = np.array([0.0, 0.2, 0.49, 7.3])
    _, _, patches = spot.patches(y, -y)
    assert patches[0].max() == pytest.approx(1.0)
    assert patches.sum(axis=(1, 2)) == pytest.approx(patches[0].sum(), rel=1e-4)


def test_line_is_seen_as_its_cross_section_at_any_displacement():
    lattice = Lattice(shape=(20, 30), margin_px=12, sigma_px=1.4)
    along = np.arange(-12, 42, 0.25)
    lattice.add_points(np.full(along.size, 9.0), along, np.full(along.size, 0.25))
    for shift, image in zip([0.0, 0.37, -1.6], lattice.images(np.array([0.0, 0.37, -1.6]), np.zeros(3)), strict=True):
        edges = np.arange(21) - 0.5
        section = np.diff(ndtr((edges - 9.0 - shift) / 1.4))
        assert image[:, 15] == pytest.approx(section, abs=1e-6)


def test_displaced_image_holds_the_point_where_it_moved():
    lattice = Lattice(shape=(21, 25), margin_px=10, sigma_px=1.3)
    lattice.add_points(np.array([10.25]), np.array([11.5]), np.array([3.0]))
    image = lattice.images(np.array([1.75]), np.array([-2.3]))[0]
    rows, columns = np.mgrid[0:21, 0:25]
    assert image.sum() == pytest.approx(3.0, rel=1e-4)
    assert (image * rows).sum() / image.sum() == pytest.approx(12.0, abs=1e-3)
    assert (image * columns).sum() / image.sum() == pytest.approx(9.2, abs=1e-3)
