"""Changes by hand hold when boutons are looked for again, and can be saved."""

import json

import numpy as np

from napari_boutonrelease.analysis.hand_edits import HandEdits, edits_from_dict

FOUND = np.array([10.0, 20.0, 30.0]), np.array([5.0, 5.0, 5.0])


def spared(edits):
    return edits.spared(*FOUND, reach_px=2.0).tolist()


def test_deleting_spares_the_others():
    assert spared(HandEdits().delete((20.4, 5.0))) == [True, False, True]


def test_deleting_what_was_placed_by_hand_leaves_nothing_behind():
    edits = HandEdits().add(12.0, 40.0)
    assert edits.delete((12.0, 40.0)) == HandEdits()


def test_moving_clears_the_old_place_and_fills_the_new_one():
    edits = HandEdits().move((10.0, 5.0), (14.0, 6.0))
    assert spared(edits) == [False, True, True]
    assert [one.place for one in edits.placed] == [(14.0, 6.0)]
    again = edits.move((14.0, 6.0), (15.0, 7.0))
    assert spared(again) == [False, True, True]
    assert [one.place for one in again.placed] == [(15.0, 7.0)]


def test_a_bouton_found_where_one_was_placed_is_not_taken_twice():
    assert spared(HandEdits().add(29.0, 5.0)) == [True, True, False]


def test_redrawing_keeps_the_pixels_and_moves_to_their_centre():
    edits = HandEdits().redraw((10.0, 5.0), ((10, 5), (10, 6), (11, 5), (11, 6)))
    assert edits.placed[0].place == (10.5, 5.5)
    assert spared(edits) == [False, True, True]


def test_merging_leaves_one_bouton_between():
    edits = HandEdits().merge(((10.0, 5.0), (20.0, 5.0)))
    assert spared(edits) == [False, False, True]
    assert [one.place for one in edits.placed] == [(15.0, 5.0)]


def test_trials_are_excluded_once_and_can_come_back():
    edits = HandEdits().exclude(7, "focus").exclude(3, "flash").exclude(7, "focus lost")
    assert edits.excluded == ((3, "flash"), (7, "focus lost"))
    assert edits.include(3).excluded == ((7, "focus lost"),)


def test_edits_survive_json():
    edits = HandEdits().add(1.5, 2.0, ((1, 2), (2, 2))).delete((10.0, 5.0)).exclude(4, "no stimulus")
    assert edits_from_dict(json.loads(json.dumps(edits.as_dict()))) == edits


def test_a_drawn_footprint_moves_along():
    edits = HandEdits().add(10.5, 5.5, ((10, 5), (10, 6), (11, 5), (11, 6)))
    moved = edits.move((10.5, 5.5), (13.4, 5.5)).placed[0]
    assert moved.place == (13.5, 5.5)
    assert moved.pixels == ((13, 5), (13, 6), (14, 5), (14, 6))


def test_where_a_bouton_came_from_survives_json():
    edits = HandEdits().move((10.0, 5.0), (14.0, 6.0))
    assert edits.placed[0].origin == (10.0, 5.0)
    assert edits.move((14.0, 6.0), (15.0, 6.0)).placed[0].origin == (10.0, 5.0)
    assert edits_from_dict(json.loads(json.dumps(edits.as_dict()))) == edits
