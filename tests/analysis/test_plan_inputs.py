"""The boutons to plan for are the same from the table in memory as from its file."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from napari_boutonrelease.analysis.columns import BOUTONS
from napari_boutonrelease.analysis.plan_inputs import measured_boutons, read_measured_boutons
from napari_boutonrelease.errors import InputError, SavedAnalysisError
from napari_boutonrelease.reports.tables import write_table


@pytest.fixture
def boutons():
    frame = pd.DataFrame(np.nan, index=range(4), columns=list(BOUTONS.names)).astype(object)
    frame["bouton"] = [1, 2, 3, 4]
    frame["trials"] = [60.0, 60.0, 60.0, np.nan]
    frame["p_release"] = [0.55, 1.0, 0.0, np.nan]
    frame["n_sites"] = [2.0, 1.0, np.nan, np.nan]
    frame["snr"] = [4.5, 6.0, 3.0, np.nan]
    frame["q_cv"] = [0.3, 0.3, 0.3, np.nan]
    frame["flags"] = ["n_unresolved", "", "silent;few_trials", None]
    return frame


def test_the_table_says_what_its_file_says(boutons, tmp_path):
    write_table(boutons, tmp_path / "boutons.csv", table=BOUTONS)
    taken = measured_boutons(boutons, q_over_noise=None, q_cv=None)
    assert taken == read_measured_boutons(tmp_path, q_over_noise=None, q_cv=None)
    assert [one.reason for one in taken] == ["", "", "no release seen", "no quantal fit"]
    assert [one.trials for one in taken] == [60, 60, 60, None]
    assert taken[0].planned.p_release == pytest.approx(0.55)


def test_what_is_asked_for_takes_the_place_of_what_was_measured(boutons):
    (first, *_) = measured_boutons(boutons, q_over_noise=12.0, q_cv=0.5)
    assert (first.planned.q_over_noise, first.planned.q_cv) == (12.0, 0.5)


def test_a_wrong_row_is_named(boutons):
    boutons.loc[1, "p_release"] = 1.5
    with pytest.raises(SavedAnalysisError, match="boutons, row 2, column p_release: must lie between 0 and 1"):
        measured_boutons(boutons, q_over_noise=None, q_cv=None)


def test_no_bouton_is_nothing_to_plan_for(boutons):
    with pytest.raises(InputError, match="No bouton was found"):
        measured_boutons(boutons[:0], q_over_noise=None, q_cv=None)
