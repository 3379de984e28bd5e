"""A binding of Qt that ends the interpreter is noticed before it does."""

from __future__ import annotations

import sys

import pytest

from napari_boutonrelease.docks import binding
from napari_boutonrelease.docks.axon_dock import AxonDock


@pytest.fixture
def told(monkeypatch):
    """Warnings to the person, as if no dock had been opened before."""
    told = []
    monkeypatch.setattr(binding.notifications, "show_warning", told.append)
    binding.warn_of_binding.cache_clear()
    yield told
    binding.warn_of_binding.cache_clear()


def lose(monkeypatch, references_a_call):
    """Let every object without a parent lose references to None when it is asked for its parent."""
    left = [100_000.0]

    class Orphan:
        def parent(self):
            left[0] -= references_a_call

    monkeypatch.setattr(binding, "QObject", Orphan)
    monkeypatch.setattr(sys, "getrefcount", lambda _: round(left[0]))


def test_the_binding_in_use_keeps_its_references():
    """Where this fails, the interpreter aborts later on: install another release of the binding."""
    assert not binding.loses_references()


@pytest.mark.parametrize(("references_a_call", "loses"), [(1, True), (0.01, False), (0, False), (-0.1, False)])
def test_one_reference_a_call_is_a_loss_and_the_few_of_other_threads_are_not(monkeypatch, references_a_call, loses):
    lose(monkeypatch, references_a_call)
    assert binding.loses_references() is loses


def test_it_is_told_once_what_will_happen_and_what_to_do(make_napari_viewer, monkeypatch, told):
    viewer = make_napari_viewer()
    lose(monkeypatch, 1)
    for _ in range(2):
        viewer.window.add_dock_widget(AxonDock(viewer))
    (words,) = told
    assert "after some minutes" in words
    assert "'PySide6<6.12'" in words


def test_nothing_is_told_of_a_binding_that_loses_nothing(make_napari_viewer, told):
    viewer = make_napari_viewer()
    viewer.window.add_dock_widget(AxonDock(viewer))
    assert told == []
