"""Exponential fits against the certified values of the NIST Statistical Reference Datasets (nonlinear regression)."""

import numpy as np
import pytest

from napari_boutonrelease.responses import fit_exponential

MISRA1A = (
    [77.6, 114.9, 141.1, 190.8, 239.9, 289.0, 332.8, 378.4, 434.8, 477.3, 536.8, 593.1, 689.1, 760.0],
    [10.07, 14.73, 17.94, 23.93, 29.61, 35.18, 40.02, 44.82, 50.76, 55.05, 61.01, 66.40, 75.47, 81.78],
)
BOXBOD = ([1, 2, 3, 5, 7, 10], [109, 149, 149, 191, 213, 224])
# fmt: off
MGH17_Y = [
    .844, .908, .932, .936, .925, .908, .881, .850, .818, .784, .751, .718, .685, .658, .628, .603, .580, .558, .538,
    .522, .506, .490, .478, .467, .457, .448, .438, .431, .424, .420, .414, .411, .406,
]
LANCZOS3_Y = [
    2.5134, 2.0443, 1.6684, 1.3664, 1.1232, .9269, .7679, .6389, .5338, .4479, .3776, .3197, .2720, .2325, .1997,
    .1723, .1493, .1301, .1138, .1000, .0883, .0783, .0698, .0624,
]
# fmt: on


@pytest.mark.parametrize("start", [1e-4, 5e-4, 2e-3])
def test_misra1a(start):
    fit = fit_exponential(*MISRA1A, start_rates=[start], form="saturation", offset=False)
    assert fit.amplitudes[0] == pytest.approx(238.94212918, rel=1e-7)
    assert fit.rates[0] == pytest.approx(5.5015643181e-4, rel=1e-7)
    assert fit.amplitudes_se[0] == pytest.approx(2.7070075241, rel=1e-6)
    assert fit.rates_se[0] == pytest.approx(7.2668688436e-6, rel=1e-6)
    assert fit.residual_sum == pytest.approx(0.12455138894, rel=1e-8)


@pytest.mark.parametrize("start", [0.2, 0.75, 1.0])
def test_boxbod(start):
    fit = fit_exponential(*BOXBOD, start_rates=[start], form="saturation", offset=False)
    assert fit.amplitudes[0] == pytest.approx(213.80940889, rel=1e-7)
    assert fit.rates[0] == pytest.approx(0.54723748542, rel=1e-7)
    assert fit.amplitudes_se[0] == pytest.approx(12.354515176, rel=1e-6)
    assert fit.rates_se[0] == pytest.approx(0.10455993237, rel=1e-6)
    assert fit.residual_sum == pytest.approx(1168.0088766, rel=1e-9)


def test_mgh17_two_exponentials_and_offset():
    x = np.arange(0.0, 330.0, 10.0)
    fit = fit_exponential(x, MGH17_Y, start_rates=[0.01, 0.02], form="decay", offset=True)
    assert fit.offset == pytest.approx(0.37541005211, rel=1e-6)
    assert fit.amplitudes == pytest.approx([1.9358469127, -1.4646871366], rel=1e-6)
    assert fit.rates == pytest.approx([0.012867534640, 0.022122699662], rel=1e-6)
    assert fit.residual_sum == pytest.approx(5.4648946975e-5, rel=1e-8)


def test_lanczos3_three_exponentials():
    x = 0.05 * np.arange(24)
    fit = fit_exponential(x, LANCZOS3_Y, start_rates=[0.9, 2.5, 6.0], form="decay", offset=False)
    assert fit.amplitudes == pytest.approx([0.086816414977, 0.84400777463, 1.5825685901], rel=1e-4)
    assert fit.rates == pytest.approx([0.95498101505, 2.9515951832, 4.9863565084], rel=1e-4)
    assert fit.residual_sum == pytest.approx(1.6117193594e-8, rel=1e-6)
