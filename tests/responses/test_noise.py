import numpy as np
import pytest
from scipy.linalg import cholesky, toeplitz

from napari_boutonrelease.responses import (
    TimeCorrelation,
    estimate_time_correlation,
    robust_sd,
    variance_by_brightness,
    white,
)


@pytest.mark.parametrize("n", [15, 60, 2000])
def test_robust_sd_of_clean_noise_has_no_bias(n):
    rng = np.random.default_rng(1)
    sd = robust_sd(rng.normal(0.3, 2.0, (3000, n)))
    assert np.mean(sd) == pytest.approx(2.0, rel=0.03)


def test_robust_sd_is_nearly_as_precise_as_the_plain_one():
    rng = np.random.default_rng(2)
    x = rng.normal(size=(4000, 100))
    assert np.std(robust_sd(x)) < 1.25 * np.std(np.std(x, axis=1, ddof=1))


def test_robust_sd_ignores_a_tenth_of_releases():
    rng = np.random.default_rng(3)
    x = rng.normal(size=(500, 200))
    x[:, :20] += 5.0
    assert np.mean(robust_sd(x)) == pytest.approx(1.0, rel=0.05)
    assert np.mean(np.std(x, axis=1)) > 1.7


def test_robust_sd_about_a_known_centre_keeps_a_shared_error():
    rng = np.random.default_rng(4)
    x = rng.normal(size=(4000, 20)) * 0.6 + rng.normal(size=(4000, 1)) * 0.8
    assert np.sqrt(np.mean(robust_sd(x, centre=0.0) ** 2)) == pytest.approx(1.0, rel=0.05)
    assert np.sqrt(np.mean(robust_sd(x) ** 2)) < 0.7


def test_robust_sd_of_little_or_constant_data():
    assert np.isnan(robust_sd(np.array([1.0, np.nan, 2.0])))
    assert robust_sd(np.full(10, 3.0)) == 0.0


def test_whitening_turns_the_model_covariance_into_the_identity():
    phi = np.array([0.5, -0.2])
    rho = [1.0, 0.5 / 1.2]
    for lag in range(2, 12):
        rho.append(phi[0] * rho[lag - 1] + phi[1] * rho[lag - 2])
    first = np.array([rho[1]])
    innovation = np.array([1.0, 1 - rho[1] ** 2, 1 - phi @ rho[1:3]])
    model = TimeCorrelation(prediction=(np.zeros(0), first, phi), innovation=innovation)
    covariance = toeplitz(rho)
    matrix = model.whitening(np.arange(12)).toarray()
    assert matrix @ covariance @ matrix.T == pytest.approx(np.eye(12), abs=1e-12)
    assert np.abs(matrix) == pytest.approx(np.abs(np.linalg.inv(cholesky(covariance, lower=True))), abs=1e-12)
    broken = model.whitening(np.concatenate([np.arange(5), np.arange(7)])).toarray()
    assert not broken[5:, :5].any()


@pytest.mark.parametrize("memory", [0.25, 0.6])
def test_correlation_is_recovered_from_residuals_of_short_fits(memory):
    rng = np.random.default_rng(5)
    n, n_windows, n_boutons = 40, 100, 4
    x = rng.normal(size=(n, n_windows, n_boutons))
    for i in range(1, n):
        x[i] = memory * x[i - 1] + np.sqrt(1 - memory**2) * x[i]
    design = np.column_stack([np.ones(n), np.exp(-np.maximum(np.arange(n) - 15, 0) / 6) * (np.arange(n) >= 15)])
    basis = np.linalg.qr(design)[0]
    residual = x - np.einsum("ij,jwb->iwb", basis @ basis.T, x)
    found = estimate_time_correlation(
        residual.transpose(1, 0, 2).reshape(-1, n_boutons),
        frame_in_run=np.tile(np.arange(n), n_windows),
        fitted=design,
        max_order=4,
    )
    assert found.order >= 1
    assert found.prediction[1][0] == pytest.approx(memory, abs=0.04)


def test_white_noise_is_called_white():
    rng = np.random.default_rng(6)
    orders = []
    for _ in range(20):
        x = rng.normal(size=(100, 30, 3))
        x -= x.mean(axis=1, keepdims=True)
        found = estimate_time_correlation(
            x.reshape(-1, 3), frame_in_run=np.tile(np.arange(30), 100), fitted=np.ones((30, 1)), max_order=4
        )
        orders.append(found.order)
    assert np.mean(orders) < 0.2
    assert white().order == 0


def test_variance_follows_brightness_where_brightness_changes():
    brightness = np.array([[100.0, 80.0, 60.0, 40.0]])
    n = np.full((1, 4), 50.0)
    assert variance_by_brightness(3.0 + 0.5 * brightness, brightness=brightness, n_values=n) == pytest.approx(
        3.0 + 0.5 * brightness
    )
    falling = variance_by_brightness(100.0 - 0.5 * brightness, brightness=brightness, n_values=n)
    assert falling == pytest.approx(np.full((1, 4), 65.0))
    steep = variance_by_brightness(brightness - 30.0, brightness=brightness, n_values=n)
    assert steep == pytest.approx(brightness * 40 / 70)
    steady = variance_by_brightness(np.array([[1.0, 3.0]]), brightness=np.array([[100.0, 99.0]]), n_values=n[:, :2])
    assert steady == pytest.approx(np.full((1, 2), 2.0))
