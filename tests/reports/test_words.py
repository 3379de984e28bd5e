"""Results in words: what is said, what is left out, and how numbers are written."""

from dataclasses import replace

import pytest

from napari_boutonrelease.reports.facts import fact, number
from napari_boutonrelease.reports.words import (
    flag_holders,
    headlines,
    recording_facts,
    recording_line,
    selection_sentences,
)


def test_the_main_results_are_said_with_their_intervals(result):
    said = " ".join(headlines(result)).replace("\u00a0", " ")
    mean = result.summary["population"]
    expected = f"{mean['p_release']:.2f} (95 % interval {mean['p_release_lo']:.2f} to {mean['p_release_hi']:.2f})"
    assert f"Mean p_release is {expected} over 8 boutons (all boutons with a usable baseline, however found)." in said
    assert "One vesicle gives 0.121 (95 % interval 0.112 to 0.131) dF/F." in said
    assert "no more alike than chance (Moran's I −0.12, p = 0.41)" in said
    assert "Bouton 4 shows no release; the 95 % interval of p_release ends at 0.06." in said
    assert "sampling taken out, p < 0.001" in said


@pytest.mark.parametrize(
    ("group", "change", "expected"),
    [
        ("heterogeneity", {"p": 0.6}, "may all share one p_release"),
        ("morans_i", {"value": 0.5, "p": 0.001}, "Neighbours along the axon are alike"),
        ("co_release", {"p": 0.002}, "do not release independently"),
        ("stimulus_failures", {"trials": 9, "p": 0.001}, "suspect failed stimulation"),
    ],
)
def test_verdicts_follow_the_numbers(result, group, change, expected):
    changed = {**result.summary, group: {**result.summary[group], **change}}
    assert expected in " ".join(headlines(replace(result, summary=changed)))
    assert expected not in " ".join(headlines(result))


def test_the_mean_corrected_for_missed_boutons_says_of_which_it_speaks(result, selected_result):
    said = " ".join(headlines(selected_result))
    assert "Corrected for boutons that were missed, mean p_release is 0.33 (95 % interval 0.20 to 0.50)" in said
    assert "above 0.020" in said
    assert "silent ones among them" in said
    assert "Corrected" not in " ".join(headlines(result))
    one = " ".join(selection_sentences(selected_result))
    assert "50 % of boutons are found with p_release 0.050, and 95 % with 0.18" in one
    assert "0.40 (95 % interval 0.10 to 1.20) are expected to have been missed (4 boutons found" in one


def test_trains_and_pulse_intervals_are_said_where_there_are_any(result, train_result):
    said = " ".join(headlines(train_result))
    assert "responses settle at 0.41 (95 % interval 0.33 to 0.53) of the first" in said
    assert "comes back with a time constant of 300 ms (95 % interval 240 ms to 390 ms)" in said
    assert "Depression recovers between pulses with a time constant of 200 ms" in said
    assert "Facilitation wears off" not in said
    assert "settle" not in " ".join(headlines(result))


@pytest.mark.parametrize("missing", [{}, {"population": None}, {"population": {"p_release": float("nan")}}])
def test_what_is_unknown_is_left_out(result, missing):
    bare = replace(result, summary=missing)
    said = " ".join(headlines(bare))
    assert "nan" not in said.lower()
    assert "no mean over them is given" in said
    assert [name for name, _ in recording_facts(bare)] == ["Response shape"]
    assert recording_line(bare).startswith("9 boutons")


def test_facts_have_a_closed_list_of_names(result):
    assert number(result, "recording.trials") == 60
    assert fact(replace(result, summary={"recording": {"trials": float("nan")}}), "recording.trials") is None
    with pytest.raises(KeyError, match=r"recording\.trial"):
        fact(result, "recording.trial")


def test_flags_name_their_boutons(result):
    holders = flag_holders(result)
    assert holders["silent"] == [4]
    assert holders["edge"] == [1, 7]
    assert "poor_fit" not in holders


def test_both_means_are_said_where_some_boutons_were_found_by_shape_alone(result):
    population = result.summary["population"]
    said = " ".join(headlines(result))
    assert f"Over the 7 boutons found by their responses it is {population['p_release_found_by_responses']:.2f}" in said
    all_by_response = {**population, "boutons_found_by_responses": population["boutons"]}
    assert "Over the" not in " ".join(headlines(replace(result, summary={"population": all_by_response})))


def test_where_nothing_releases_only_limits_are_said(quiet_result):
    said = " ".join(headlines(quiet_result))
    assert said == "No release was seen at any of 3 boutons; the 95 % intervals of p_release end between 0.08 and 0.20."


def test_verdicts_on_pulse_pairs_are_counted(result):
    def verdict(*names):
        boutons = result.boutons.assign(paired_pulse=[*names, *[None] * (len(result.boutons) - len(names))])
        return " ".join(headlines(replace(result, boutons=boutons)))

    assert "at no single bouton is it beyond doubt other than 1" in verdict("unresolved", "unresolved")
    assert "bouton by bouton: 1 facilitation and 2 unresolved" in verdict("unresolved", "facilitation", "unresolved")
