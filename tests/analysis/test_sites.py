"""Ids of boutons under changes by hand, without a recording: found in order, added ones keep theirs."""

import json

import numpy as np
import pytest

from napari_boutonrelease.analysis.hand_edits import HandEdits, edits_from_dict
from napari_boutonrelease.analysis.sites import Sites, correct_by_hand, put_in_order


def found(*y_px, by="both"):
    """Boutons found below each other, as they are before any change by hand."""
    n = len(y_px)
    return put_in_order(
        Sites(
            bouton=np.arange(1, n + 1),
            y_px=np.array(y_px, dtype=float),
            x_px=np.full(n, 10.0),
            found_by=(by,) * n,
            axon_px=np.full(n, np.nan),
            axon_offset_px=np.full(n, np.nan),
            drawn=(None,) * n,
            next_bouton=n + 1,
            spot_sigma_px=1.5,
            evidence=np.zeros((100, 100)),
            evidence_cut=5.0,
            expected_false=0.1,
            maxima=None,
        ),
        axon=None,
    )


def ids(sites, edits):
    """Id of each bouton by its place along y."""
    corrected = correct_by_hand(sites, edits, axon=None, spacing_px=4.0)
    assert np.all(np.diff(corrected.bouton) > 0)
    assert corrected.next_bouton > max(corrected.bouton, default=0)
    return dict(zip(corrected.y_px.tolist(), corrected.bouton.tolist(), strict=True))


def next_id(sites, edits):
    return correct_by_hand(sites, edits, axon=None, spacing_px=4.0).next_bouton


def test_without_changes_ids_run_top_to_bottom():
    assert ids(found(30, 10, 20), HandEdits()) == {10.0: 1, 20.0: 2, 30.0: 3}


@pytest.mark.parametrize("more", [(), (15.0,), (15.0, 25.0, 35.0)])
def test_an_added_bouton_keeps_its_id_however_many_are_found_anew(more):
    edits = HandEdits().add(50.0, 10.0, bouton=4).add(60.0, 10.0, bouton=5)
    assert ids(found(10, 20, 30), edits) == {10.0: 1, 20.0: 2, 30.0: 3, 50.0: 4, 60.0: 5}
    again = ids(found(10, 20, *more), edits)
    assert (again[50.0], again[60.0]) == (4, 5)
    others = [again[y] for y in sorted((10.0, 20.0, *more))]
    assert others == [1, 2, 3, 6, 7][: len(others)]


def test_found_boutons_do_not_get_the_id_of_an_added_one_that_is_gone():
    edits = HandEdits().add(50.0, 10.0, bouton=4).delete((50.0, 10.0))
    assert list(ids(found(10, 20, 30, 40), edits).values()) == [1, 2, 3, 5]
    assert next_id(found(10, 20, 30), edits) == 5


def test_the_next_id_is_not_that_of_a_deleted_found_one():
    edits = HandEdits().delete((30.0, 10.0))
    assert ids(found(10, 20, 30), edits) == {10.0: 1, 20.0: 2}
    assert next_id(found(10, 20, 30), edits) == 4


def test_a_moved_bouton_follows_the_found_one_and_keeps_its_id_without_it():
    edits = HandEdits().move((20.0, 10.0), (23.0, 10.0), bouton=2)
    assert ids(found(10, 20, 30), edits) == {10.0: 1, 23.0: 2, 30.0: 3}
    assert ids(found(5, 10, 20, 30), edits) == {5.0: 1, 10.0: 2, 23.0: 3, 30.0: 4}
    assert ids(found(10, 30, 40), edits) == {10.0: 1, 23.0: 2, 30.0: 3, 40.0: 4}


def test_ids_of_a_file_stay_and_come_first():
    given = found(10, 20, 30, by="file")
    assert ids(given, HandEdits().add(50.0, 10.0, bouton=2)) == {10.0: 1, 20.0: 2, 30.0: 3, 50.0: 4}
    assert ids(given, HandEdits().add(50.0, 10.0, bouton=9)) == {10.0: 1, 20.0: 2, 30.0: 3, 50.0: 9}


def test_boutons_added_without_an_id_follow_in_their_order_and_can_keep_it():
    edits = HandEdits().add(50.0, 10.0).add(40.0, 10.0)
    now = ids(found(10), edits)
    assert now == {10.0: 1, 50.0: 2, 40.0: 3}
    numbered = edits.numbered({(y, 10.0): bouton for y, bouton in now.items()})
    assert ids(found(10), numbered.delete((50.0, 10.0))) == {10.0: 1, 40.0: 3}
    assert numbered.given == (2, 3)


def test_ids_survive_json():
    edits = HandEdits().add(50.0, 10.0, bouton=4).add(60.0, 10.0, bouton=5).delete((60.0, 10.0))
    again = edits_from_dict(json.loads(json.dumps(edits.as_dict())))
    assert again == edits
    assert again.given == (4, 5)
    assert next_id(found(10), again) == 6
