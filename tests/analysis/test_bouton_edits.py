"""Boutons changed by their ids, and the model's views of places before anything is measured of them."""

import numpy as np
import pytest

from napari_boutonrelease.analysis.bouton_edits import (
    add_bouton,
    delete_boutons,
    merge_boutons,
    move_boutons,
    redraw_bouton,
)
from napari_boutonrelease.analysis.hand_edits import HandEdits
from napari_boutonrelease.analysis.model import AnalysisModel, compute, follow_axon, trace
from napari_boutonrelease.errors import InputError
from napari_boutonrelease.recording import movie_from_array


@pytest.fixture(scope="module")
def shared(simulate, quick):
    simulation = simulate()
    movie = movie_from_array(simulation.frames, frame_interval_s=0.01, pixel_size_um=0.1)
    model = AnalysisModel()
    model.settings = quick
    model.open(movie, simulation.protocol)
    model.accept(model.request(), compute(model.request()))
    return model


@pytest.fixture
def model(shared):
    """The model without changes by hand."""
    shared.edit(HandEdits())
    shared.draw_axon(None)
    assert not shared.stale
    return shared


def place(model, bouton):
    sites = model.sites()
    at = int(np.flatnonzero(sites.bouton == bouton)[0])
    return float(sites.y_px[at]), float(sites.x_px[at])


def ids(model):
    return model.sites().bouton.tolist()


def test_added_moved_merged_deleted(model):
    before = ids(model)
    new = add_bouton(model, (26.0, 22.0))
    assert ids(model) == [*before, new]
    move_boutons(model, {new: (26.0, 24.0), before[0]: (5.0, 5.0)})
    assert place(model, new) == (26.0, 24.0)
    assert place(model, before[0]) == (5.0, 5.0)
    assert merge_boutons(model, (new, before[0])) == before[0]
    assert place(model, before[0]) == (15.5, 14.5)
    delete_boutons(model, (before[0], before[1]))
    assert ids(model) == before[2:]
    for _ in range(4):
        model.undo()
    assert ids(model) == before
    assert not model.stale


def test_redrawn(model):
    bouton = ids(model)[0]
    assert redraw_bouton(model, bouton, np.array([[20, 20], [20, 21]])) == bouton
    assert place(model, bouton) == (20.0, 20.5)
    with pytest.raises(InputError, match="no pixel left"):
        redraw_bouton(model, bouton, np.empty((0, 2), dtype=int))


def test_what_cannot_be_done_is_refused_and_changes_nothing(model):
    first, second = ids(model)[:2]
    for change, message in (
        (lambda: add_bouton(model, place(model, first)), f"Bouton {first} is here already"),
        (lambda: add_bouton(model, (-3.0, 4.0)), "outside the image of 32 x 64"),
        (lambda: move_boutons(model, {first: place(model, second)}), f"Bouton {second} is here already"),
        (lambda: delete_boutons(model, (99,)), "no bouton 99"),
        (lambda: merge_boutons(model, (first,)), "at least two"),
    ):
        edits = model.edits
        with pytest.raises(InputError, match=message):
            change()
        assert model.edits is edits


def test_a_bouton_can_be_moved_within_its_own_reach(model):
    first = ids(model)[0]
    y, x = place(model, first)
    move_boutons(model, {first: (y + 0.5, x)})
    assert place(model, first) == (y + 0.5, x)


def test_boutons_must_have_been_looked_for():
    with pytest.raises(InputError, match="find them first"):
        add_bouton(AnalysisModel(), (1.0, 1.0))


def test_traces_of_older_edits_are_not_taken(model):
    request = model.request()
    traced = trace(request)
    told = []
    model.traced_changed.connect(lambda: told.append(1))
    assert model.accept_traces(request, traced)
    add_bouton(model, (26.0, 22.0))
    assert not model.accept_traces(request, traced)
    assert told == [1]
    newer = model.request()
    assert model.accept_traces(newer, trace(newer))
    assert model.traced.places.bouton.tolist() == ids(model)
    assert model.measured.places.bouton.tolist() != ids(model)


def test_results_are_stale_once_another_axon_is_drawn(model):
    model.draw_axon(np.array([[15.0, 60.0], [15.0, 2.0]]))
    assert model.stale
    assert np.all(np.diff(model.sites().x_px) < 0)


def test_the_axon_is_traced_along_its_light(model):
    clicks = np.array([[14.0, 12.0], [15.0, 51.0]])
    path = follow_axon(model.request(), clicks)
    assert path[[0, -1]] == pytest.approx(clicks)
    assert len(path) > 30


def test_summary_without_writing_anything(model):
    assert model.summary()["counts"]["boutons"] == len(model.measured.places.bouton)
    with pytest.raises(InputError, match="Nothing was measured yet"):
        AnalysisModel().summary()
