"""What the README and the pages say can be done: commands parse, protocols read, snippets run, links lead somewhere."""

from __future__ import annotations

import re
import shlex
import tomllib
from pathlib import Path

import numpy as np
import pytest

import napari_boutonrelease as br
from napari_boutonrelease.cli.main import COMMANDS, build_parser, main
from napari_boutonrelease.simulation import BoutonRecipe, preset_recipe, simulate_recording, write_simulation

ROOT = Path(__file__).parents[2]
PAGES = [ROOT / "README.md", *sorted((ROOT / "docs").glob("*/*.md"))]
IDS = [page.relative_to(ROOT).as_posix() for page in PAGES]
FENCE = re.compile(r"^( *)```(\w*)\n(.*?)^\1```", flags=re.MULTILINE | re.DOTALL)


def fences(page: Path, language: str) -> list[str]:
    """Content of the fences of one language, without the page's own indent."""
    return [
        "\n".join(line.removeprefix(indent) for line in text.splitlines())
        for indent, found, text in FENCE.findall(page.read_text(encoding="utf-8"))
        if found == language
    ]


def marked_command(name: str) -> list[str]:
    """Lines of the fence after a mark of the README, as the checks take it."""
    match = re.search(rf"^<!-- {name} command -->\n```\n(.*?)```", (ROOT / "README.md").read_text(), re.M | re.S)
    assert match
    return match.group(1).splitlines()


@pytest.fixture(scope="module")
def recipe():
    boutons = tuple(
        BoutonRecipe(y_px=20.0, x_px=x, n_sites=2, p_site=p, q_dff=0.6, f0_photons=9.0)
        for x, p in ((16.0, 0.4), (40.0, 0.6))
    )
    return preset_recipe("fast-pair", height_px=40, width_px=60, trials=12, boutons=boutons)


@pytest.fixture(scope="module")
def folder(recipe, tmp_path_factory):
    """A folder in which a small recording lies under the names that the pages use."""
    folder = tmp_path_factory.mktemp("pages")
    write_simulation(folder / "axon.tif", recipe, rng=np.random.default_rng(2), overwrite=False)
    return folder


def test_the_commands_of_the_readme_are_one_line_each():
    assert len(marked_command("start")) == 1
    assert marked_command("start")[0].endswith("boutonrelease demo")
    assert len(marked_command("test")) == 1
    assert "pytest" in marked_command("test")[0]


@pytest.mark.parametrize("page", PAGES, ids=IDS)
def test_every_protocol_can_be_read_and_every_settings_file_used(page, tmp_path):
    for text in fences(page, "toml"):
        content = tomllib.loads(text)
        if "stimuli" in content or "reporter" in content:
            whole = text if "stimuli" in content else text + "\n[stimuli]\nfirst_s = 0.5\ntrials = 1\n"
            (tmp_path / "protocol.toml").write_text(whole, encoding="utf-8")
            assert br.read_protocol(tmp_path / "protocol.toml").stimuli.trials > 0
        else:
            br.Settings.model_validate(content)


@pytest.mark.parametrize("page", PAGES, ids=IDS)
def test_every_command_is_understood(page):
    for text in [*fences(page, ""), *fences(page, "bash")]:
        for line in text.splitlines():
            for command in line.split("&&"):
                words = shlex.split(command)
                if words and words[0].rsplit("/", 1)[-1] == "boutonrelease" and words[1:] != ["--version"]:
                    assert words[1] in COMMANDS
                    build_parser(words[1]).parse_args(words[1:])


@pytest.mark.parametrize("page", PAGES, ids=IDS)
def test_every_link_to_a_file_leads_to_it(page):
    for target in re.findall(r"\]\(([^)#]+)(?:#[^)]*)?\)", page.read_text(encoding="utf-8")):
        if "://" not in target:
            assert (page.parent / target).exists(), target


def test_pictures_are_small():
    pictures = list((ROOT / "docs" / "images").glob("*.png"))
    assert pictures
    assert all(picture.stat().st_size < 300_000 for picture in pictures)


def test_the_snippet_of_the_readme_runs(folder, monkeypatch, capsys):
    monkeypatch.chdir(folder)
    (snippet,) = fences(ROOT / "README.md", "python")
    exec(compile(snippet, "README.md", "exec"), {})
    assert "p_release_hi" in capsys.readouterr().out
    assert (folder / "axon.release" / "report.pdf").exists()


def test_the_tables_can_be_read_as_the_page_says(folder, monkeypatch, tmp_path):
    br.analyse(folder / "axon.tif", folder / "axon.protocol.toml").write(tmp_path / "axon.release")
    monkeypatch.chdir(tmp_path)
    names: dict[str, object] = {}
    for snippet in fences(ROOT / "docs" / "how-to" / "read-tables.md", "python"):
        exec(compile(snippet, "read-tables.md", "exec"), names)
    assert names["amplitudes"].shape[1] == 2
    assert names["dff"].shape == (len(names["boutons"]), len(names["time_s"]))


def test_the_nwb_file_can_be_read_as_the_page_says(folder, monkeypatch, capsys):
    monkeypatch.chdir(folder)
    details = br.reports.NwbDetails(species="Rattus norvegicus")
    analysis = br.analyse("axon.tif", "axon.protocol.toml")
    analysis.write("axon.release", overwrite=True, nwb=details)
    names: dict[str, object] = {}
    (snippet,) = fences(ROOT / "docs" / "how-to" / "nwb.md", "python")
    exec(compile(snippet, "nwb.md", "exec"), names)
    assert "p_release_hi" in capsys.readouterr().out
    assert names["dff"].shape == (len(analysis.time_s), len(names["boutons"]))
    assert np.sum([weight for _, _, weight in names["weights"]]) == pytest.approx(
        analysis.footprints.weights[0].sum(), abs=1e-4
    )
    assert len(names["trials"]) == 12


def test_the_snippets_for_scripts_run(folder, recipe, monkeypatch, tmp_path):
    monkeypatch.chdir(tmp_path)
    for name in ("axon.tif", "axon.protocol.toml"):
        (tmp_path / name).symlink_to(folder / name)
    recording = simulate_recording(preset_recipe("fast-pair", height_px=40, width_px=60, trials=60, n_boutons=1),
                                   rng=np.random.default_rng(3))  # fmt: skip
    rng = np.random.default_rng(1)
    names: dict[str, object] = {
        "frames": recording.frames,
        "amplitudes": 0.2 * rng.binomial(2, 0.4, 60) + rng.normal(0, 0.03, 60),
        "null_amplitudes": rng.normal(0, 0.03, 200),
    }
    for snippet in fences(ROOT / "docs" / "how-to" / "script.md", "python"):
        exec(compile(snippet, "script.md", "exec"), names)
    assert (tmp_path / "axon.release" / "boutons.csv").exists()
    assert 0.3 < names["fit"].p_release.value < 0.9


def test_the_plan_of_the_page_is_what_the_command_prints(capsys):
    page = ROOT / "docs" / "how-to" / "plan-trials.md"
    command, promised = fences(page, "")[0], fences(page, "text")[0]
    assert main(shlex.split(command)[1:]) == 0
    pairs = list(zip(capsys.readouterr().out.splitlines(), promised.splitlines(), strict=True))
    assert pairs[:2] == [(line, line) for line, _ in pairs[:2]]
    for found, shown in pairs[2:]:  # numbers may differ in the last digit between versions of what they rest on
        goals, trials = zip(
            *((line[:67].rstrip(), float(line[67:73].replace(",", ""))) for line in (found, shown)), strict=True
        )
        assert goals[0] == goals[1]
        assert trials[0] == pytest.approx(trials[1], rel=0.02)
