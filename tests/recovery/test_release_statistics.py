"""Release of whole axons from amplitudes of known truth, held against an observer who knows all but p_release.

Limits stand 3.5 SD of chance, measured by resampling axons of the long runs, beyond what is expected at these sizes;
the long runs hold the requirements themselves.
"""

import numpy as np
import pytest
from population import AXONS, Population, study_axons, study_pairs, summarise, summarise_pairs


def study(population, *, axons, seed):
    found = study_axons(population, axons=axons, rng=np.random.default_rng(seed))
    releasing = found["p"][:, 0] > 0
    return found, {key: values[releasing] for key, values in found.items()}


@pytest.mark.parametrize(
    ("population", "axons", "ratio", "bias", "coverage", "wrong"),
    [
        pytest.param(Population(q=4.5), 8, 1.20, 0.020, 0.89, 1.17, id="clear"),
        pytest.param(Population(q=2.1), 8, 1.40, 0.030, 0.84, 1.12, id="dim"),
        pytest.param(Population(q=4.5, pulses=2), 4, 1.20, 0.020, 0.86, 1.10, id="paired"),
        pytest.param(Population(q=4.5, p_release=(0.02, 0.15)), 5, 1.26, 0.020, 0.82, 1.40, id="seldom"),
    ],
)
def test_release_is_estimated_almost_as_well_as_by_one_who_knows_the_quanta(
    population, axons, ratio, bias, coverage, wrong
):
    _, found = study(population, axons=axons, seed=3)
    summary = summarise(found)
    assert summary["ratio"] < ratio
    assert abs(summary["bias"]) < bias
    assert summary["coverage"] > coverage
    assert summary["wrong"] < wrong * summary["wrong_if_known"]
    assert summary["n_in_set"] > 0.88


def test_an_axon_that_never_releases_gets_no_release():
    found, _ = study(Population(q=4.5, silent=8), axons=4, seed=4)
    assert np.sqrt(np.mean(found["estimate"] ** 2)) < 0.02
    assert np.mean(found["lo"] == 0) > 0.9
    assert np.mean(found["silent_probability"] > 0.5) > 0.9
    assert np.median(found["hi"]) < 0.15
    assert found["wrong"].mean() < 0.005


def test_silent_boutons_among_releasing_ones_are_told_apart():
    found, releasing = study(Population(q=4.5, silent=4), axons=5, seed=5)
    never = found["p"][:, 0] == 0
    assert np.sqrt(np.mean(found["estimate"][never] ** 2)) < 0.02
    assert np.mean(found["lo"][never] == 0) > 0.85
    assert np.median(found["hi"][never]) < 0.06
    assert np.all(releasing["silent_probability"] < 0.5)


def test_few_trials_widen_the_intervals_and_do_not_break_them():
    _, found = study(Population(q=4.5, trials=20), axons=10, seed=6)
    summary = summarise(found)
    assert summary["coverage"] > 0.86
    assert abs(summary["bias"]) < 0.04
    assert np.median(found["hi"] - found["lo"]) > 0.25


@pytest.mark.parametrize(("q", "p_least"), [(4.5, 0.2), (2.1, 0.3)])
def test_paired_pulse_ratio_is_unbiased_and_its_interval_holds(q, p_least):
    pairs = study_pairs(Population(q=q, pulses=2), axons=60, rng=np.random.default_rng(7))
    summary = summarise_pairs(pairs, p_first=(p_least, 1.0))
    assert abs(summary["bias"]) < 3.5 * summary["bias_se"]
    assert summary["bias_se"] < 0.04
    assert 0.90 < summary["coverage"] < 0.985
    assert summary["undefined"] <= 2


@pytest.mark.validation
@pytest.mark.parametrize("name", [name for name, (population, _) in AXONS.items() if population.silent < 8])
def test_requirements_hold_for_every_population(name):
    population, axons = AXONS[name]
    _, found = study(population, axons=axons, seed=11)
    summary = summarise(found)
    # One bouton alone, and an axon that is dim and seldom releases, fall short of it; the validation page says so.
    hard = population.boutons == 1 or (population.q < 4 and population.p_release[0] < 0.1)
    assert summary["ratio"] < (1.6 if hard else 1.15 if population.q >= 4 else 1.3)
    assert abs(summary["bias"]) < max(0.01, 3 * summary["bias_se"])
    assert 0.92 < summary["coverage"] < 0.99
    assert summary["n_in_set"] > 0.93
