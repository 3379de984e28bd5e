"""The change of 1/CV² against the mean between two conditions."""

from collections import Counter

import numpy as np
import pytest

from napari_boutonrelease.errors import InputError
from napari_boutonrelease.quanta import inverse_cv2_change

Q_CV = 0.3


def draw(rng, *, n_sites, p_site, q, trials=80):
    vesicles = rng.binomial(n_sites, p_site, trials)
    sizes = rng.gamma(np.maximum(vesicles, 1) / Q_CV**2) * Q_CV**2 * (vesicles > 0)
    return q * sizes + rng.standard_normal(trials)


def compare(before, after, *, rng, noise_sd=(1.0, 1.0), n_bootstrap=600):
    return inverse_cv2_change(
        before, after, noise_sd=noise_sd, n_null=(300, 300), confidence=0.95, n_bootstrap=n_bootstrap, rng=rng
    )


def many(*, first, second, q_ratio=1.0, repeats=120, seed=1):
    rng = np.random.default_rng(seed)
    return [compare(draw(rng, q=4.4, **first), draw(rng, q=4.4 * q_ratio, **second), rng=rng) for _ in range(repeats)]


@pytest.mark.parametrize(
    ("first", "second", "q_ratio", "meant", "least"),
    [
        # measured with 300 repeats: right in 100 % and 59 %, the opposite in none and 2 %
        ({"n_sites": 3, "p_site": 0.2}, {"n_sites": 3, "p_site": 0.6}, 1.0, "presynaptic", 0.95),
        ({"n_sites": 3, "p_site": 0.4}, {"n_sites": 3, "p_site": 0.4}, 0.6, "postsynaptic", 0.44),
    ],
    ids=["release", "vesicle size"],
)
def test_it_points_to_what_changed(first, second, q_ratio, meant, least):
    found = many(first=first, second=second, q_ratio=q_ratio)
    loci = Counter(one.locus for one in found)
    opposite = {"presynaptic": "postsynaptic", "postsynaptic": "presynaptic"}[meant]
    assert loci[meant] > least * len(found)
    assert loci[opposite] < 0.09 * len(found)
    assert all("reporter is linear" in one.reason for one in found if one.locus is not None)

    def inverse(n_sites, p_site):
        return n_sites * p_site / (1 - p_site + Q_CV**2)

    truth = inverse(**second) / inverse(**first)
    means = second["p_site"] * q_ratio / first["p_site"]
    # 120 intervals of 95 %: fewer than 106 have a chance of 1e-3
    assert sum(one.inverse_cv2_ratio.lo <= truth <= one.inverse_cv2_ratio.hi for one in found) >= 106
    assert sum(one.mean_ratio.lo <= means <= one.mean_ratio.hi for one in found) >= 106


def test_nothing_changed_has_no_locus():
    found = many(first={"n_sites": 2, "p_site": 0.4}, second={"n_sites": 2, "p_site": 0.4})
    # 120 at 5 %: more than 15 have a chance of 1e-3
    assert sum(one.locus is not None for one in found) <= 15
    assert all("no change of the mean" in one.reason for one in found if one.locus is None)


def test_known_values():
    # mean 2, variance 4 - 0.25 noise against mean 4, variance 4 - 0.25: 1/CV² four times as large
    before = np.tile([0.0, 4.0], 50)
    after = before + 2.0
    rng = np.random.default_rng(2)
    found = compare(before, after, noise_sd=(0.5, 0.5), rng=rng)
    spread = before.var(ddof=1) - 0.25
    assert found.before == pytest.approx(4.0 / spread)
    assert found.after == pytest.approx(16.0 / spread)
    assert found.inverse_cv2_ratio.value == pytest.approx(4.0)
    assert found.mean_ratio.value == pytest.approx(2.0)


def test_what_cannot_be_said_is_said_in_words():
    rng = np.random.default_rng(3)
    good = draw(rng, n_sites=2, p_site=0.5, q=4.4)
    silent = rng.standard_normal(80) * 0.99
    steady = 5.0 + 0.9 * rng.standard_normal(80)
    cases = {
        "the mean after is within noise of zero": compare(good, silent - silent.mean(), rng=rng),
        "the mean before is within noise of zero": compare(silent - silent.mean(), good, rng=rng),
        "the variance before is within noise": compare(steady / 1.1, good, rng=rng),
        "too few amplitudes: 2 before": compare([1.0, 2.0, np.nan], good, rng=rng),
        "too few amplitudes: 80 before, 0 after": compare(good, np.full(80, np.nan), rng=rng),
    }
    for words, found in cases.items():
        assert words in found.reason
        assert found.locus is None
        assert np.isnan(found.inverse_cv2_ratio.value)
    assert np.isfinite(cases["the variance before is within noise"].mean_ratio.lo)


def test_wrong_input_is_named():
    rng = np.random.default_rng(4)
    with pytest.raises(InputError, match="n_bootstrap must be at least 100"):
        compare([1.0, 2.0], [1.0, 2.0], rng=rng, n_bootstrap=5)
    with pytest.raises(InputError, match="noise_sd must be greater than 0"):
        compare([1.0, 2.0, 3.0], [1.0, 2.0, 3.0], rng=rng, noise_sd=(0.0, 1.0))
    with pytest.raises(InputError, match="before must have 1 axes"):
        compare([[1.0]], [1.0], rng=rng)
