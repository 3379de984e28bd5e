"""Are the components of a bouton's amplitudes equally spaced?"""

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import measure_compression, pool_compression, saturate

Q, NOISE = 0.35, 0.06


def amplitudes(n_sites, p_site, *, c, trials, rng):
    vesicles = rng.binomial(n_sites, p_site, (trials, 1))
    size = Q / (1 - c) * np.where(vesicles > 0, rng.gamma(np.maximum(vesicles, 1) / 0.09, 0.09), 0.0)
    shown = saturate(size, max_dff=Q / c, hill=1.0, rest_share=None) if c > 0 else size
    return shown + rng.normal(0, NOISE, vesicles.shape)


def measure(a, *, noise=NOISE, q=Q):
    return measure_compression(a, np.full(a.shape, noise), q=q, n_max=6, q_cv=0.3, q_cv_doubt=0.15)


def axon(c, *, rng, trials=150, n_boutons=6):
    boutons = [
        amplitudes(n, p, c=c, trials=trials, rng=rng)
        for n, p in zip([3, 2, 4, 3, 5, 2], [0.4, 0.6, 0.35, 0.5, 0.3, 0.5], strict=True)
    ]
    return [measure(a) for a in boutons[:n_boutons]]


def test_axon_with_equal_steps_is_not_compressed():
    pooled = pool_compression(axon(0.0, rng=np.random.default_rng(1)))
    assert pooled.n_boutons >= 4
    assert pooled.lo <= 0.0 <= pooled.hi
    assert pooled.hi < 0.15
    assert pooled.p > 0.01


def test_axon_with_a_saturating_reporter_is_compressed():
    boutons = axon(0.2, rng=np.random.default_rng(2))
    pooled = pool_compression(boutons)
    assert pooled.p < 0.001
    assert pooled.lo < 0.2 < pooled.hi
    assert pooled.n_boutons == sum(one.n_boutons for one in boutons)


def test_pooling_a_bouton_with_nothing_changes_nothing():
    one = measure(amplitudes(3, 0.5, c=0.1, trials=200, rng=np.random.default_rng(3)))
    silent = measure(np.random.default_rng(4).normal(0, NOISE, (80, 1)))
    assert silent.n_boutons == 0
    pooled = pool_compression([one, silent])
    assert (pooled.p, pooled.compression) == (one.p, one.compression)


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"n_sites": 1}, "more than one vesicle at a time"),
        ({"p_site": 0.005}, "too few releases"),
        ({"noise": 0.3}, "noise SDs"),
        ({"q": np.nan}, "not known"),
        ({"missing": True}, "no amplitude"),
    ],
)
def test_what_cannot_tell_says_so(given, words):
    a = amplitudes(given.get("n_sites", 3), given.get("p_site", 0.5), c=0.0, trials=100, rng=np.random.default_rng(5))
    found = measure(
        np.full(a.shape, np.nan) if given.get("missing") else a, noise=given.get("noise", NOISE), q=given.get("q", Q)
    )
    assert words in found.reason
    assert np.isnan(found.p)
    assert np.isnan(found.compression)
    assert not found.log_likelihood.any()


def test_pulses_share_their_compression():
    rng = np.random.default_rng(6)
    first, second = (amplitudes(4, p, c=0.25, trials=200, rng=rng) for p in (0.3, 0.6))
    both = measure(np.hstack([first, second]))
    assert both.p < 0.05
    assert both.lo < 0.25 < both.hi


def test_scaling_changes_nothing():
    a = amplitudes(3, 0.5, c=0.1, trials=100, rng=np.random.default_rng(7))
    assert measure(10 * a, noise=10 * NOISE, q=10 * Q).p == pytest.approx(measure(a).p, rel=1e-3)


@pytest.mark.validation
def test_p_keeps_its_promise():
    rng = np.random.default_rng(8)
    found = [
        measure(amplitudes(rng.integers(1, 6), rng.uniform(0.15, 0.6), c=0.0, trials=80, rng=rng)) for _ in range(600)
    ]
    p = np.array([one.p for one in found if one.n_boutons])
    assert p.size > 250
    assert np.mean(p < 0.05) < 0.05 + 3.1 * np.sqrt(0.05 * 0.95 / p.size)
    pooled = [pool_compression(found[i : i + 6]).p for i in range(0, 600, 6)]
    assert np.sum(np.array(pooled) < 0.05) <= 12


def test_bad_input_is_refused():
    good = np.zeros((5, 1))
    settings = {"q": Q, "n_max": 3, "q_cv": 0.3, "q_cv_doubt": 0.15}
    with pytest.raises(InputError, match="same shape"):
        measure_compression(good, np.zeros((4, 1)), **settings)
    with pytest.raises(InputError, match="n_max"):
        measure_compression(good, good, **(settings | {"n_max": 0}))
    with pytest.raises(InputError, match="q_cv must"):
        measure_compression(good, good, **(settings | {"q_cv": 0.0}))
