"""Importing the package costs nothing, and what it offers is what it promises."""

from __future__ import annotations

import subprocess
import sys

import pytest

import napari_boutonrelease

GUI = {"napari", "magicgui", "qtpy", "PyQt6", "PySide6", "superqt"}


def modules_after(code: str) -> set[str]:
    """Names of all modules loaded in a fresh interpreter that ran `code`."""
    script = f"{code}\nimport sys\nprint('MODULES', *sorted(sys.modules))"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    return set(done.stdout.rpartition("MODULES")[2].split())


def test_importing_the_package_loads_nothing_heavy():
    loaded = modules_after("import napari_boutonrelease")
    assert "napari_boutonrelease" in loaded
    assert not loaded & {"numpy", "scipy", "pandas", "matplotlib", "pydantic", "napari", "qtpy", "typing"}


def test_the_error_classes_load_no_numpy():
    loaded = modules_after("import napari_boutonrelease as br; br.InputError")
    assert "napari_boutonrelease.errors" in loaded
    assert "numpy" not in loaded


@pytest.mark.parametrize("name", napari_boutonrelease.__all__)
def test_every_public_name_resolves(name):
    assert name in dir(napari_boutonrelease)
    value = getattr(napari_boutonrelease, name)
    assert value is getattr(napari_boutonrelease, name)
    assert getattr(value, "__name__", "").rpartition(".")[2] == name


def test_public_names_are_pinned():
    pinned = (
        "Analysis AnalysisWarning BoutonFileError CompareSettings ComparedRecordings InputError Movie MovieError "
        "OutputError Protocol ProtocolError RegularStimuli ResponseShape SavedAnalysisError Settings StimulusTable "
        "analyse analysis batch boutons compare comparison movie_from_array open_movie quanta read_protocol recording "
        "reports responses simulation write_protocol"
    )
    assert sorted(napari_boutonrelease.__all__) == pinned.split()


def test_an_unknown_name_is_an_attribute_error():
    with pytest.raises(AttributeError, match="has no attribute 'analyze_everything'"):
        napari_boutonrelease.analyze_everything  # noqa: B018


def test_all_public_names_load_neither_napari_nor_qt():
    loaded = modules_after("import napari_boutonrelease as br\nfor name in br.__all__: getattr(br, name)")
    assert "numpy" in loaded
    assert not {name.partition(".")[0] for name in loaded} & {
        "napari",
        "magicgui",
        "qtpy",
        "PyQt6",
        "PySide6",
        "superqt",
    }
