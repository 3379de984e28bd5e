"""CSV files: UTF-8, comma, decimal point, empty cell where nothing is available; what is read is what was written."""

import numpy as np
import pandas as pd
import pytest

from napari_boutonrelease.analysis.column_types import empty_table
from napari_boutonrelease.analysis.columns import TABLES
from napari_boutonrelease.errors import OutputError, SavedAnalysisError
from napari_boutonrelease.reports import read_table, write_table


def responses(**cells):
    row = {
        "bouton": 1,
        "trial": 2,
        "pulse": 1,
        "stimulus_s": 0.5,
        "amplitude": 0.1234567,
        "amplitude_se": 0.01,
        "called": 1,
        "p_released": 1.0,
        "used": 1,
        "reason": None,
    }
    return pd.DataFrame([row | cells])


def cells_of(path):
    header, line = path.read_text(encoding="utf-8").splitlines()
    return dict(zip(header.split(","), line.split(","), strict=True))


def test_numbers_are_short_and_missing_cells_empty(tmp_path):
    path = tmp_path / "responses.csv"
    write_table(responses(amplitude_se=np.nan, called=np.nan, p_released=np.inf), path, table=TABLES["responses"])
    cells = cells_of(path)
    assert cells["amplitude"] == "0.123457"
    assert cells["amplitude_se"] == cells["called"] == cells["p_released"] == cells["reason"] == ""
    assert "nan" not in path.read_text(encoding="utf-8").lower()


@pytest.mark.parametrize("missing", [None, np.nan, pd.NA])
def test_every_kind_of_missing_is_an_empty_cell(tmp_path, missing):
    path = tmp_path / "responses.csv"
    write_table(responses(called=missing, reason=missing), path, table=TABLES["responses"])
    assert cells_of(path)["called"] == cells_of(path)["reason"] == ""


def test_integers_are_written_as_integers_though_a_gap_made_them_floats(tmp_path):
    path = tmp_path / "responses.csv"
    frame = pd.concat([responses(called=1.0), responses(trial=3, called=np.nan)])
    write_table(frame, path, table=TABLES["responses"])
    assert [line.split(",")[6] for line in path.read_text(encoding="utf-8").splitlines()[1:]] == ["1", ""]


def test_times_keep_microseconds_in_long_recordings(tmp_path):
    path = tmp_path / "responses.csv"
    write_table(responses(stimulus_s=7212.123456), path, table=TABLES["responses"])
    assert cells_of(path)["stimulus_s"] == "7212.123456"
    write_table(responses(stimulus_s=-0.0), path, table=TABLES["responses"])
    assert cells_of(path)["stimulus_s"] == "0"


def test_text_with_commas_quotes_and_letters_of_any_language_survives(tmp_path):
    path = tmp_path / "responses.csv"
    write_table(responses(reason='Fokus, "gesprungen" µ'), path, table=TABLES["responses"])
    assert read_table(path, table=TABLES["responses"])["reason"][0] == 'Fokus, "gesprungen" µ'


@pytest.mark.parametrize("table", TABLES)
def test_what_is_read_is_what_was_written(tmp_path, result, table):
    path = tmp_path / f"{table}.csv"
    frame = getattr(result, table)
    write_table(frame, path, table=TABLES[table])
    read = read_table(path, table=TABLES[table])
    assert len(read) == len(frame)
    for column in TABLES[table].columns:
        if column.type == "string":
            assert read[column.name].fillna("").tolist() == frame[column.name].fillna("").tolist()
        else:
            given = frame[column.name].to_numpy(dtype=float, na_value=np.nan)
            np.testing.assert_allclose(
                read[column.name].to_numpy(dtype=float, na_value=np.nan), given, rtol=6e-6, atol=1e-6
            )


def test_a_table_without_rows_is_a_header(tmp_path):
    path = tmp_path / "spontaneous.csv"
    write_table(empty_table(TABLES["spontaneous"]), path, table=TABLES["spontaneous"])
    assert path.read_bytes() == b"bouton,time_s,amplitude,amplitude_se,score\n"
    assert len(read_table(path, table=TABLES["spontaneous"])) == 0


def test_a_cell_of_the_wrong_type_is_refused(tmp_path):
    with pytest.raises(OutputError, match=r"column trial: .*2\.5 is not a whole number"):
        write_table(responses(trial=2.5), tmp_path / "responses.csv", table=TABLES["responses"])
    with pytest.raises(OutputError, match=r"column reason: .*not text"):
        write_table(responses(reason=3), tmp_path / "responses.csv", table=TABLES["responses"])
    with pytest.raises(OutputError, match="missing: reason"):
        write_table(responses().drop(columns="reason"), tmp_path / "responses.csv", table=TABLES["responses"])


def test_a_file_that_is_no_such_table_is_refused(tmp_path):
    path = tmp_path / "responses.csv"
    path.write_text("a,b\n1,2\n", encoding="utf-8")
    with pytest.raises(SavedAnalysisError, match=r"responses\.csv cannot be read as the table responses"):
        read_table(path, table=TABLES["responses"])
    with pytest.raises(SavedAnalysisError, match="cannot be read"):
        read_table(tmp_path / "none.csv", table=TABLES["drift"])
