"""Options are the settings, and the settings are the options."""

from __future__ import annotations

import argparse
import json

import pytest

from napari_boutonrelease import InputError, Settings
from napari_boutonrelease.analysis.settings_schema import SCHEMA_PATH, settings_schema
from napari_boutonrelease.cli.options import add_settings_options, given_settings, read_settings, settings_options


def parse(*words: str) -> argparse.Namespace:
    parser = argparse.ArgumentParser()
    parser.add_argument("--settings")
    add_settings_options(parser)
    return parser.parse_args(words)


def defaults() -> dict[str, object]:
    """Dotted path and default of every setting, from the models themselves."""
    flat = {}
    for section, value in Settings().model_dump().items():
        flat |= (
            {f"{section}.{name}": entry for name, entry in value.items()}
            if isinstance(value, dict)
            else {section: value}
        )
    return flat


def test_the_stored_schema_equals_the_models():
    stored, live = json.loads(SCHEMA_PATH.read_text(encoding="utf-8")), json.loads(settings_schema())
    assert list(settings_options(stored)) == list(settings_options(live)), (
        "run python -m napari_boutonrelease.analysis.settings_schema"
    )


def test_every_setting_is_an_option_of_its_own():
    options = list(settings_options(json.loads(SCHEMA_PATH.read_text(encoding="utf-8"))))
    assert {path: field.get("default") for _, path, field, _ in options} == defaults()
    assert len({option for option, *_ in options}) == len(options)
    assert {"--threshold-sd", "--false-discovery", "--n-max", "--quanta-bootstrap", "--pairs-bootstrap", "--seed"} <= {
        option for option, *_ in options
    }


def test_no_option_given_leaves_the_defaults():
    args = parse()
    assert given_settings(args) == {}
    assert read_settings(args) == Settings()


def test_options_reach_their_settings():
    settings = read_settings(
        parse("--threshold-sd", "3", "--n-max", "5", "--no-correct-motion", "--baseline", "trial", "--seed", "7")
    )
    assert settings.calls.threshold_sd == 3.0
    assert settings.quanta.n_max == 5
    assert settings.recording.correct_motion is False
    assert settings.responses.baseline == "trial"
    assert settings.seed == 7
    assert settings.detection == Settings().detection


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (["--threshold-sd", "-1"], r"^--threshold-sd must be greater than 0 \(given -1\.0\)\.$"),
        (["--n-max", "31"], r"^--n-max must be less than or equal to 30 \(given 31\)\.$"),
        (["--pairs-bootstrap", "3"], r"^--pairs-bootstrap must be greater than or equal to 100 \(given 3\)\.$"),
    ],
)
def test_a_refused_value_names_its_option(words, message):
    with pytest.raises(InputError, match=message):
        read_settings(parse(*words))


def test_the_command_line_wins_over_the_file(tmp_path):
    file = tmp_path / "mine.toml"
    file.write_text("seed = 4\n[calls]\nthreshold_sd = 3.0\nthreshold_rule = 'balanced'\n", encoding="utf-8")
    settings = read_settings(parse("--settings", str(file), "--threshold-sd", "2"))
    assert (settings.calls.threshold_sd, settings.calls.threshold_rule, settings.seed) == (2.0, "balanced", 4)


def test_settings_of_a_saved_analysis_are_used(tmp_path):
    file = tmp_path / "analysis.json"
    wanted = Settings(quanta={"n_max": 3}, seed=9)
    file.write_text(json.dumps({"settings": wanted.model_dump(), "movie": {}}), encoding="utf-8")
    assert read_settings(parse("--settings", str(file))) == wanted


def test_settings_build_on_those_of_an_earlier_analysis():
    base = Settings(quanta={"n_max": 3}, seed=9)
    settings = read_settings(parse("--seed", "2"), base=base)
    assert (settings.quanta.n_max, settings.seed) == (3, 2)


@pytest.mark.parametrize(
    ("name", "text", "message"),
    [
        (
            "a.toml",
            "[calls]\nthreshold = 3",
            r"a\.toml: there is no setting calls\.threshold; .*calls\.threshold_sd",
        ),
        (
            "a.toml",
            "[calls]\nthreshold_sd = 'high'",
            r"a\.toml: calls\.threshold_sd must be a valid number.*'high'\)",
        ),
        ("a.toml", "[calls", r"a\.toml: the settings are not valid TOML"),
        ("a.json", "{", r"a\.json: the settings are not valid JSON"),
        ("a.json", "[1]", r"a\.json: expected sections of settings, found a list"),
    ],
)
def test_a_wrong_settings_file_names_file_and_key(tmp_path, name, text, message):
    file = tmp_path / name
    file.write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match=message):
        read_settings(parse("--settings", str(file)))


def test_a_missing_settings_file_is_named(tmp_path):
    with pytest.raises(InputError, match=r"none\.toml: the settings cannot be read \(No such file"):
        read_settings(parse("--settings", str(tmp_path / "none.toml")))
