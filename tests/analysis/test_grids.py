"""From the table of responses back to arrays."""

import numpy as np
import pandas as pd
import pytest

from napari_boutonrelease.analysis.grids import response_grid


@pytest.fixture
def responses():
    """Responses of boutons 2, 5 and 9; those of odd trials count."""
    rows = [(bouton, trial, pulse) for bouton in (2, 5, 9) for trial in (1, 2, 3) for pulse in (1, 2)]
    table = pd.DataFrame(rows, columns=["bouton", "trial", "pulse"]).astype("Int64")
    table["amplitude"] = [100 * bouton + 10 * trial + pulse for bouton, trial, pulse in rows]
    table["used"] = table["trial"] % 2
    return table


def test_every_response_that_counts_is_at_its_place_and_no_other(responses):
    grid = response_grid(responses, "amplitude", bouton=[9, 2])
    nan = np.nan
    np.testing.assert_array_equal(grid, [[[911, 912], [nan, nan], [931, 932]], [[211, 212], [nan, nan], [231, 232]]])


def test_a_bouton_without_responses_and_no_bouton_are_empty(responses):
    assert np.isnan(response_grid(responses, "amplitude", bouton=[7])).all()
    assert response_grid(responses, "amplitude", bouton=[]).shape == (0, 3, 2)
    assert response_grid(responses.iloc[:0], "amplitude", bouton=[1]).shape == (1, 0, 0)


def test_a_wanted_shape_is_kept(responses):
    grid = response_grid(responses, "amplitude", bouton=[2], shape=(2, 3))
    assert grid.shape == (1, 2, 3)
    assert grid[0, 0, 0] == 211
    assert np.isnan(grid[0, :, 2]).all()
