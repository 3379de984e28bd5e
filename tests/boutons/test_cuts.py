"""Which maxima another cut would let pass is told at once, and agrees with looking again."""

import numpy as np
import pytest

from napari_boutonrelease.boutons import Cuts, FalseRate, Maxima

RATE = FalseRate(start=4.0, scale=1.0, n_tail=10.0)


def maxima(*evidence, at_shape=None, share=0.0):
    n = len(evidence)
    near = np.zeros((10, 100), dtype=bool)
    near.ravel()[: round(share * near.size)] = True
    return Maxima(
        y_px=np.zeros(n, dtype=np.intp),
        x_px=np.arange(n),
        evidence=np.array(evidence, dtype=float),
        at_shape=np.zeros(n, dtype=bool) if at_shape is None else np.array(at_shape),
        cuts=Cuts(rate=RATE, near_shape=near),
    )


def test_more_pass_where_more_may_be_false():
    found = maxima(30.0, 12.0, 10.0, 8.0, 6.0)
    counts = [found.passing(share)[0].sum() for share in (0.001, 0.01, 0.05, 0.3)]
    assert counts == sorted(counts)
    assert counts[0] < counts[-1]


def test_the_cut_lets_as_many_false_ones_pass_as_are_allowed():
    passed, cut = maxima(30.0, 30.0, 30.0).passing(0.1)
    assert passed.all()
    assert RATE.expected(cut) == pytest.approx(0.1 * 0.3 * 3)


def test_nothing_passes_where_nothing_is_convincing():
    passed, cut = maxima(4.5, 4.2).passing(0.05)
    assert not passed.any()
    assert RATE.expected(cut) == pytest.approx(0.05 * 0.1)


def test_a_spot_of_the_mean_image_needs_less():
    passed, cut = maxima(30.0, 8.0, 8.0, at_shape=[False, False, True], share=0.02).passing(0.05)
    assert passed.tolist() == [True, False, True]
    assert cut > 8.0
