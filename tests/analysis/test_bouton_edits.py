"""Boutons changed by their ids, and the model's views of places before anything is measured of them."""

import json
from pathlib import Path

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
from napari_boutonrelease.analysis.savefile import provenance_of, read_saved
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


def test_an_id_stays_with_its_bouton_and_is_never_given_again(model):
    found = ids(model)
    first, second, third = (add_bouton(model, place) for place in ((26.0, 22.0), (5.0, 40.0), (26.0, 45.0)))
    assert len({*found, first, second, third}) == len(found) + 3
    places = {bouton: place(model, bouton) for bouton in ids(model)}
    delete_boutons(model, (first,))
    assert {bouton: place(model, bouton) for bouton in ids(model)} == {
        bouton: where for bouton, where in places.items() if bouton != first
    }
    move_boutons(model, {second: (5.0, 42.0)})
    assert place(model, third) == (26.0, 45.0)
    assert merge_boutons(model, (third, second)) == second
    assert ids(model) == [*found, second]
    for _ in range(3):
        model.undo()
    assert {bouton: place(model, bouton) for bouton in ids(model)} == places
    for _ in range(3):
        model.redo()
    assert ids(model) == [*found, second]
    delete_boutons(model, (second,))
    assert add_bouton(model, (26.0, 22.0)) > third


def test_an_id_taken_back_is_not_given_again(model):
    taken_back = add_bouton(model, (26.0, 22.0))
    model.undo()
    assert not model.stale
    assert add_bouton(model, (26.0, 22.0)) > taken_back
    assert model.stale


def test_ids_come_back_with_a_saved_analysis(model, tmp_path):
    first, second = add_bouton(model, (26.0, 22.0)), add_bouton(model, (5.0, 40.0))
    delete_boutons(model, (first,))
    path = tmp_path / "analysis.json"
    path.write_text(json.dumps(provenance_of(compute(model.request()), pipeline=model.pipeline)), encoding="utf-8")
    saved = read_saved(path)
    assert model.pipeline.sites(saved.settings, edits=saved.edits).bouton.tolist() == ids(model)
    again = AnalysisModel()
    again.open(model.movie, model.protocol, edits=saved.edits)
    again.settings = saved.settings
    again.accept(again.request(), compute(again.request()))
    assert ids(again) == ids(model)
    assert add_bouton(again, (26.0, 22.0)) > second


def test_an_analysis_saved_without_ids_is_read_as_it_was(model):
    saved = read_saved(Path(__file__).parent / "saved" / "without_ids.json")
    model.edit(saved.edits)
    # What its tables said: 1 was deleted, 2 moved, 4 and 5 added.
    assert ids(model) == [2, 3, 4, 5]
    assert place(model, 4) == (26.0, 22.0)
    assert place(model, 5) == (5.0, 40.0)
    assert model.edits.excluded == ((3, "focus lost"),)
    delete_boutons(model, (4,))
    assert ids(model) == [2, 3, 5]
    model.undo()
    assert ids(model) == [2, 3, 4, 5]
    model.redo()
    assert add_bouton(model, (26.0, 22.0)) > 5


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
        (lambda: merge_boutons(model, (first, first)), "at least two"),
    ):
        edits = model.edits
        with pytest.raises(InputError, match=message):
            change()
        assert model.edits is edits


def test_boutons_do_not_merge_onto_another_one(model):
    left, right, between = (add_bouton(model, (26.0, x)) for x in (10.0, 30.0, 20.5))
    edits, before = model.edits, ids(model)
    with pytest.raises(InputError, match=f"Boutons {left} and {right} would merge on top of bouton {between}"):
        merge_boutons(model, (left, right))
    assert model.edits is edits
    assert ids(model) == before
    assert merge_boutons(model, (left, right, between)) == left
    assert place(model, left) == (26.0, pytest.approx(20.17, abs=0.01))


def test_a_footprint_is_not_centred_on_another_bouton(model):
    first, second = add_bouton(model, (26.0, 10.0)), add_bouton(model, (26.0, 30.0))
    edits = model.edits
    with pytest.raises(InputError, match=f"centred on bouton {second}"):
        redraw_bouton(model, first, np.array([[26, 28], [26, 32]]))
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
