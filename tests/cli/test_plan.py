"""`plan` answers for a bouton that is described and for those of an analysis, and writes its answers whole."""

from __future__ import annotations

import csv
import json

import frictionless
import pytest

from napari_boutonrelease.analysis.columns import BOUTONS
from napari_boutonrelease.cli.main import main

HEADER = "bouton,trials,p_release,n_sites,snr,q_cv,flags,more"
ROWS = [
    "1,60,0.55,2,4.5,0.3,n_unresolved,x",
    "2,60,0.9,1,6,0.3,,x",
    "3,60,0.001,,3,0.3,silent;few_trials,x",
    "4,60,0.3,1,4.5,0.3,,x",
    "5,,,,,,,x",
]


def write_results(folder, *lines):
    folder.mkdir()
    (folder / "boutons.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    (folder / "analysis.json").write_text("{}", encoding="utf-8")
    return folder


@pytest.fixture
def results(tmp_path):
    return write_results(tmp_path / "axon.release", HEADER, *ROWS)


def cells(path):
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def contents(folder):
    return {path: path.read_bytes() for path in folder.rglob("*") if path.is_file()}


def trials(out, words):
    (line,) = [line for line in out.splitlines() if line.startswith(words)]
    return int(line.removeprefix(words).split()[0].replace(",", ""))


def test_a_described_bouton_gets_an_answer_for_every_goal(capsys):
    assert main(["plan", "--p-release", "0.5", "--n-sites", "1", "--q-over-noise", "20", "--width", "0.39"]) == 0
    out = capsys.readouterr().out
    assert out.startswith("a bouton of p_release 0.50 (1 site of p_site 0.50), q/noise 20, q_cv 0.3; power 0.8\n")
    assert trials(out, "interval of p_release 0.39 wide") == pytest.approx(22, abs=2)
    assert trials(out, "1 site told from 2") < 200
    assert trials(out, "paired-pulse ratio 1.5 told from 1") > 50
    alone = trials(out, "p_release changed by +0.2, at one bouton, before and after each")
    assert trials(out, "p_release changed by +0.2, over 10 boutons, before and after each") < alone


def test_options_reach_the_answers(capsys):
    call = ["plan", "--n-sites", "1", "--p-site", "0.4", "--simulations", "0"]
    answers = {}
    for option in ([], ["--power", "0.95"], ["--boutons", "40"], ["--q-cv", "0.6"], ["--change-sd", "0.2"]):
        assert main([*call, *option]) == 0
        answers[tuple(option)] = capsys.readouterr().out
    ratio, over_ten = (
        "paired-pulse ratio 1.5 told from 1",
        "p_release changed by +0.2, over 10 boutons, before and after each",
    )
    plain = answers[()]
    assert trials(answers["--power", "0.95"], ratio) > trials(plain, ratio)
    assert trials(answers["--q-cv", "0.6"], ratio) > trials(plain, ratio)
    assert trials(answers["--boutons", "40"], over_ten.replace("10", "40")) < trials(plain, over_ten)
    assert trials(answers["--change-sd", "0.2"], over_ten) > trials(plain, over_ten)


def test_what_cannot_be_reached_says_why(capsys):
    assert main(["plan", "--q-over-noise", "0.5", "--p-release", "0.95", "--ppr", "3", "--width", "0.01"]) == 0
    out = capsys.readouterr().out
    assert out.count(">100,000") == 2
    assert "q/noise 0.5 is too small, more light or a brighter reporter would help" in out
    assert "leaves room for a ratio below 1.3 only" in out
    assert "p_release 0.95 cannot rise by 0.2" in out


@pytest.mark.parametrize("name", ["", "analysis.json", "boutons.csv"])
def test_an_analysis_gets_a_row_a_bouton(results, capsys, name):
    assert main(["plan", str(results / name), "--width", "0.3", "--simulations", "0"]) == 0
    out = capsys.readouterr().out
    rows = {line.split()[0]: line.split() for line in out.splitlines() if line[:1].isdigit()}
    assert list(rows) == ["1", "2", "3", "4", "5"]
    assert rows["1"][1:5] == ["0.55", "2", "4.5", "60"]
    assert rows["2"][5].endswith("*")
    assert rows["2"][7:] == ["-", "-"]
    assert rows["3"][5:] == ["-"] * 4
    assert "* reached by the trials done" in out
    assert "bouton 3: no release seen" in out
    assert "bouton 5: no quantal fit" in out
    assert "bouton 2: change: p_release 0.9 cannot rise by 0.2" in out
    assert "p_release changed by +0.2, over 2 boutons, before and after each: " in out


def test_the_columns_that_are_read_are_those_that_an_analysis_writes():
    assert set(HEADER.split(",")) - {"more"} <= set(BOUTONS.names)


def test_more_light_can_be_asked_of_an_analysis(results, capsys):
    needed = []
    for option in ([], ["--q-over-noise", "12"]):
        assert main(["plan", str(results), "--simulations", "0", *option]) == 0
        (row,) = [line.split() for line in capsys.readouterr().out.splitlines() if line.startswith("1 ")]
        needed.append(int(row[6].replace(",", "")))
    assert needed[1] < needed[0]


def test_the_plan_is_written_with_its_description(results, tmp_path, capsys):
    out = tmp_path / "axon.plan"
    assert main(["plan", str(results), "--out", str(out), "--simulations", "200"]) == 0
    assert capsys.readouterr().out.endswith(f"plan: {out}\n")
    names = {path.relative_to(out).as_posix() for path in contents(out)}
    assert names == {
        "plan.csv", "plan_curves.csv", "plan.json", "datapackage.json", "figures/plan.svg", "figures/plan.png",
    }  # fmt: skip
    report = frictionless.validate(str(out / "datapackage.json"))
    assert report.valid, report.flatten(["message"])
    rows = cells(out / "plan.csv")
    assert [row["goal"] for row in rows if row["bouton"] == "1"] == ["width", "sites", "ppr", "change"]
    (ppr,) = [row for row in rows if row["bouton"] == "4" and row["goal"] == "ppr"]
    assert float(ppr["simulated_lo"]) < 0.8 < float(ppr["simulated_hi"])
    assert float(ppr["reached"]) >= 0.8 > float(ppr["reached_now"])
    assert int(ppr["trials_needed"]) > int(ppr["trials_done"]) == 60
    (silent,) = [row for row in rows if row["bouton"] == "3"]
    assert (silent["goal"], silent["trials_needed"], silent["reason"]) == ("", "", "no release seen")
    assert {row["goal"] for row in cells(out / "plan_curves.csv")} == {
        "width", "sites", "ppr", "change", "paired_change",
    }  # fmt: skip
    asked = json.loads((out / "plan.json").read_text(encoding="utf-8"))
    assert asked["goals"]["ppr"] == 1.5
    assert asked["analysis"] == str(results)


def test_curves_pass_through_the_answers(tmp_path):
    out = tmp_path / "one.plan"
    assert main(["plan", "--out", str(out), "--simulations", "0"]) == 0
    answers = {row["goal"]: row for row in cells(out / "plan.csv")}
    for goal, answer in answers.items():
        curve = [row for row in cells(out / "plan_curves.csv") if row["goal"] == goal]
        needed = int(answer["trials_needed"])
        before = [float(row["reached"]) for row in curve if int(row["trials"]) < needed]
        after = [float(row["reached"]) for row in curve if int(row["trials"]) > needed]
        level = float(answer["reached"])
        enough = [level > value for value in after] if goal == "width" else [level < value for value in after]
        short = [level < value for value in before] if goal == "width" else [level > value for value in before]
        assert all(enough)
        assert all(short)
        assert enough
        assert short


def test_the_seed_decides_the_files(tmp_path):
    for name, seed in (("a", "5"), ("b", "5"), ("c", "6")):
        assert main(["plan", "--out", str(tmp_path / name), "--simulations", "100", "--seed", seed]) == 0
    a, b, c = ((tmp_path / name / "plan.csv").read_bytes() for name in "abc")
    assert a == b != c
    figures = [(tmp_path / name / "figures" / "plan.svg").read_bytes() for name in "ab"]
    assert figures[0] == figures[1]


def test_a_plan_is_replaced_only_on_demand(tmp_path, capsys):
    out = tmp_path / "one.plan"
    call = ["plan", "--out", str(out), "--simulations", "0"]
    assert main(call) == 0
    before = contents(out)
    assert main([*call, "--width", "0.3"]) == 2
    assert "one.plan already holds results; replace them with --overwrite" in capsys.readouterr().err
    assert contents(out) == before
    assert main([*call, "--width", "0.3", "--overwrite"]) == 0
    assert contents(out) != before


def test_results_of_an_analysis_are_never_taken_for_a_plan(results, capsys):
    before = contents(results)
    assert main(["plan", str(results), "--out", str(results), "--overwrite"]) == 2
    assert "is not replaced" in capsys.readouterr().err
    assert contents(results) == before


def test_a_failure_midway_leaves_nothing(tmp_path, capsys, monkeypatch):
    def fail(*args, **kwargs):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("napari_boutonrelease.reports.plan.write_json", fail)
    assert main(["plan", "--out", str(tmp_path / "one.plan"), "--simulations", "0"]) == 2
    assert "No space left on device" in capsys.readouterr().err
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(
    ("lines", "words"),
    [
        (
            ["bouton,trials", "1,60"],
            ["boutons.csv lacks the columns p_release, n_sites", "analyse"],
        ),
        ([HEADER], ["boutons.csv holds no bouton"]),
        ([HEADER, "1,60,half,2,4.5,0.3,,x"], ["boutons.csv, row 2, column p_release: 'half' is not a number"]),
        ([HEADER, ",60,0.5,2,4.5,0.3,,x"], ["boutons.csv, row 2, column bouton", "whole number"]),
        ([HEADER, "1,60,1.5,2,4.5,0.3,,x"], ["boutons.csv, row 2, column p_release", "between 0 and 1"]),
        ([HEADER, "1,60,0.5,2,-4.5,0.3,,x"], ["boutons.csv, row 2", "q_over_noise must be greater than 0"]),
    ],
)
def test_a_table_that_is_wrong_is_refused_by_its_row(tmp_path, capsys, lines, words):
    folder = write_results(tmp_path / "axon.release", *lines)
    assert main(["plan", str(folder)]) == 2
    out, err = capsys.readouterr()
    assert (out, err.count("\n")) == ("", 1)
    assert all(word in err for word in words), err


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["no.release"], "no.release holds no boutons.csv: give the folder of results that `analyse` wrote."),
        (["--p-release", "0.5", "--p-site", "0.4"], "Give --p-release or --p-site, not both"),
    ],
)
def test_a_call_that_contradicts_itself_is_one_sentence(tmp_path, monkeypatch, capsys, words, message):
    monkeypatch.chdir(tmp_path)
    assert main(["plan", *words]) == 2
    assert message in capsys.readouterr().err


def test_a_bouton_is_not_described_beside_an_analysis(results, capsys):
    assert main(["plan", str(results), "--n-sites", "3"]) == 2
    assert "--n-sites describes a bouton, but" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("option", "value", "message"),
    [
        ("--width", "1.5", "must lie between 0 and 1, both excluded (given 1.5)"),
        ("--power", "many", "must be a number (given many)"),
        ("--ppr", "1", "must differ from 1"),
        ("--ppr", "nan", "must be greater than 0 (given nan)"),
        ("--p-change", "0", "must lie between -1 and 1 and differ from 0 (given 0)"),
        ("--boutons", "1", "must be a whole number of 2 or more (given 1)"),
        ("--change-sd", "-1", "must be 0 or more (given -1)"),
        ("--q-over-noise", "inf", "must be greater than 0 (given inf)"),
    ],
)
def test_a_refused_option_is_named(capsys, option, value, message):
    with pytest.raises(SystemExit, match="2"):
        main(["plan", f"{option}={value}"])
    assert f"argument {option}: {message}" in capsys.readouterr().err
