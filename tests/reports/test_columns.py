"""The data dictionary holds the published names in the published order, each with a meaning."""

import numpy as np
import pytest

from napari_boutonrelease.analysis.column_types import check_columns, empty_table
from napari_boutonrelease.analysis.columns import SUMMARY, TABLES
from napari_boutonrelease.errors import OutputError
from napari_boutonrelease.flags import FLAGS

PUBLISHED = {
    "boutons": (
        "bouton, y_px, x_px, y_um, x_um, axon_um, axon_offset_um, footprint_px, found_by, f0, noise_sd, "
        "noise_from, snr, threshold, trials, p_called, p_called_lo, p_called_hi, false_calls_expected, p_release, "
        "p_release_lo, p_release_hi, amplitude_mean, amplitude_se, potency, p2_release, ppr, ppr_lo, ppr_hi, ppf, "
        "ppr_release, paired_pulse, p2_given_release, p2_given_failure, history_p, n_sites, n_sites_lo, "
        "n_sites_hi, p_site, p_site_lo, p_site_hi, q, q_lo, q_hi, q_from, q_cv, quantal_model, fit_p, "
        "spontaneous_per_min, crosstalk, flags"
    ),
    "pulses": (
        "bouton, pulse, trials, called, p_called, p_called_lo, p_called_hi, p_release, p_release_lo, p_release_hi, "
        "amplitude_mean, amplitude_se, amplitude_sd, potency"
    ),
    "responses": ("bouton, trial, pulse, stimulus_s, amplitude, amplitude_se, called, p_released, used, reason"),
    "spontaneous": ("bouton, time_s, amplitude, amplitude_se, score"),
    "drift": ("frame, time_s, dy_px, dx_px, match, used"),
}


@pytest.mark.parametrize("table", PUBLISHED)
def test_published_columns_stand_in_their_order(table):
    published = PUBLISHED[table].split(", ")
    ours = [name for name in TABLES[table].names if name in published]
    assert ours == published


def test_flags_stay_last():
    assert TABLES["boutons"].names[-1] == "flags"


def test_every_column_says_what_it_means():
    for table in TABLES.values():
        assert len(set(table.names)) == len(table.names)
        for column in table.columns:
            assert len(column.meaning) > 5, column.name
            suffixes = {"_px": "px", "_um": "µm", "_s": "s"}
            unit = next((unit for suffix, unit in suffixes.items() if column.name.endswith(suffix)), None)
            assert unit is None or column.unit == unit or column.name == "footprint_px", column.name


def test_flags_pattern_takes_the_registry_and_nothing_else():
    import re

    pattern = next(c for c in TABLES["boutons"].columns if c.name == "flags").constraints["pattern"]
    assert re.fullmatch(pattern, ";".join(FLAGS))
    assert not re.fullmatch(pattern, "no_such_flag")
    assert not re.fullmatch(pattern, "silent;")


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda names: names[1:], "missing: frame"),
        (lambda names: [*names, "extra"], "unknown: extra"),
        (lambda names: names[::-1], "order"),
    ],
)
def test_other_columns_are_refused(change, message):
    with pytest.raises(OutputError, match=message):
        check_columns(TABLES["drift"], change(list(TABLES["drift"].names)))


def test_an_empty_table_has_the_columns_and_takes_missing_integers():
    frame = empty_table(TABLES["boutons"])
    check_columns(TABLES["boutons"], frame.columns)
    assert len(frame) == 0
    assert frame["n_sites"].dtype == "Int64"
    assert frame["q"].dtype == np.float64


def test_summary_keys_have_two_parts_and_a_meaning():
    assert all(path.count(".") == 1 and meaning for path, meaning in SUMMARY.items())
