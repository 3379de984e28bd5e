"""The page of all boutons together: drawn where it applies, with words that follow the numbers."""

from dataclasses import replace

import numpy as np
import pytest

from napari_boutonrelease.analysis.column_types import empty_table
from napari_boutonrelease.analysis.columns import TABLES
from napari_boutonrelease.reports.figures import figures_of
from napari_boutonrelease.reports.figures_together import figure_together, shows_together
from napari_boutonrelease.reports.together_words import together_facts


def words_of(figure):
    texts = [text.get_text() for text in figure.texts]
    texts += [text.get_text() for axes in figure.axes for text in axes.texts]
    return " ".join(texts)


def changed(result, group, **changes):
    return replace(result, summary={**result.summary, group: {**result.summary.get(group, {}), **changes}})


def test_the_page_says_what_the_summary_holds(result):
    words = words_of(figure_together(result))
    assert "True SD of p_release between boutons: 0.21 (95 % interval 0.13 to 0.36)" in words
    assert "Mean correlation over stimuli 0.02" in words
    assert "1 pair of 28" in words
    assert "−0.040 (95 % interval −0.12 to 0.040) per 10 µm" in words
    assert "Moran's I of neighbours −0.12, in random order −0.14" in words
    assert "At 2 stimuli every bouton failed; independent boutons would at 1.4" in words
    assert "still count" in words


def test_left_out_stimuli_are_said_to_be(result):
    words = words_of(figure_together(changed(result, "stimulus_failures", excluded=True)))
    assert "left out of every estimate" in words
    assert "still count" not in words


def test_only_suspected_stimuli_are_marked(result):
    def marks(figure):
        lines = [line for axes in figure.axes for line in axes.lines if "suspected" in str(line.get_label())]
        return sum(len(line.get_xdata()) for line in lines)

    assert marks(figure_together(result)) == 1
    assert marks(figure_together(changed(result, "stimulus_failures", suspected=0))) == 0


def test_without_a_path_nothing_is_said_of_distance(result):
    figure = figure_together(replace(result, boutons=result.boutons.assign(axon_um=np.nan)))
    assert "Along the axon" not in words_of(figure)
    assert "Stimulus by stimulus" in words_of(figure)


@pytest.mark.parametrize(
    ("group", "keys", "reason", "words"),
    [
        ("co_release", ("value",), {"reason": "co-release needs at least 10 trials (given 8)"}, "Co-release needs at"),
        (
            "stimulus_failures",
            ("share",),
            {"method": "none: needs at least 2 boutons (given 1)"},
            "Needs at least 2 boutons (given 1).",
        ),
        (
            "p_release_against_distance",
            ("slope_per_um",),
            {"method": "none: needs at least 4 boutons along the path (given 3)"},
            "Needs at least 4 boutons",
        ),
    ],
)
def test_what_is_missing_is_put_into_words(result, group, keys, reason, words):
    assert words in words_of(figure_together(changed(result, group, **dict.fromkeys(keys), **reason)))


def test_empty_tables_are_said_to_be_empty(result):
    empty = replace(result, co_release=empty_table(TABLES["co_release"]))
    assert "no pair of boutons to compare" in words_of(figure_together(empty))


def test_the_figure_is_left_out_where_boutons_cannot_be_compared(result, empty_result):
    assert shows_together(result)
    assert "boutons_together" in figures_of(result)
    assert not shows_together(empty_result)
    assert "boutons_together" not in figures_of(empty_result)
    assert not shows_together(changed(result, "heterogeneity", boutons=1))


def test_split_halves_and_missed_boutons_are_put_into_words(result):
    halves = {"boutons": 8, "value": -0.42, "lo": -0.8, "hi": 0.1, "p": 0.12}
    halves |= {"plain": -0.7, "plain_lo": -0.9, "plain_hi": -0.2, "plain_p": 0.01}
    known = changed(changed(result, "split_half", **halves), "recording", pulses=2)
    said = dict(together_facts(changed(known, "selection", method="none: the boutons were given")))
    words = said["Release and paired-pulse ratio"].replace("\u00a0", " ")
    assert "over 8 boutons" in words
    assert "−0.42 (−0.80 to 0.10), p = 0.12" in words
    assert "From the same trials it is −0.70 (−0.90 to −0.20)" in words
    assert said["Missed boutons"] == "The boutons were given."
    alone = together_facts(changed(known, "recording", pulses=1))
    assert "Release and paired-pulse ratio" not in dict(alone)


def test_what_is_missing_is_said_without_a_figure_too(result):
    said = dict(together_facts(changed(result, "heterogeneity", sd=None, method="none: needs two boutons")))
    assert said["Spread between boutons"] == "Needs two boutons."
