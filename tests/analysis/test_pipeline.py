"""Steps are computed again only when something they rest on has changed."""

import numpy as np
import pytest

from napari_boutonrelease.analysis import pipeline as pipeline_module
from napari_boutonrelease.analysis import trace_step
from napari_boutonrelease.analysis.hand_edits import HandEdits
from napari_boutonrelease.analysis.pipeline import Pipeline
from napari_boutonrelease.analysis.run import put_together
from napari_boutonrelease.analysis.settings import PairSettings, QuantalSettings, Settings
from napari_boutonrelease.recording import movie_from_array
from napari_boutonrelease.response_shape import ResponseShape
from napari_boutonrelease.simulation import BoutonRecipe, preset_recipe, simulate_recording

SETTINGS = Settings(quanta=QuantalSettings(bootstrap=0, n_max=4), pairs=PairSettings(bootstrap=200))
SLOW = ResponseShape(latency_s=0.0, rise_s=0.002, decay_s=0.4, slow_fraction=0.0, slow_decay_s=1.0)
COUNTED = (
    "look_at_recording",
    "map_responses",
    "find_sites",
    "lay_footprints",
    "extract_traces",
    "measure_responses",
    "detect_spontaneous",
    "fit_release",
    "count_releases",
)


@pytest.fixture(scope="module")
def recording():
    boutons = tuple(
        BoutonRecipe(y_px=18.0, x_px=x, n_sites=1, p_site=p, q_dff=0.6, f0_photons=10.0)
        for x, p in ((12.0, 0.5), (32.0, 0.8), (52.0, 0.4))
    )
    recipe = preset_recipe("fast-pair", height_px=36, width_px=64, trials=30, boutons=boutons)
    simulation = simulate_recording(recipe, rng=np.random.default_rng(6))
    movie = movie_from_array(
        simulation.frames, frame_interval_s=recipe.frame_interval_s, pixel_size_um=recipe.pixel_size_um
    )
    return movie, simulation.protocol


@pytest.fixture
def ran(monkeypatch):
    """Names of the steps that were computed, in order."""
    names = []
    for name in COUNTED:
        module = trace_step if name == "extract_traces" else pipeline_module
        step = getattr(module, name)

        def counted(*args, _step=step, _name=name, **kwargs):
            names.append(_name)
            return _step(*args, **kwargs)

        monkeypatch.setattr(module, name, counted)
    return names


@pytest.fixture
def pipeline(recording, ran):
    made = Pipeline(*recording)
    made.measure(SETTINGS)
    ran.clear()
    return made


def changed(step, **settings):
    return SETTINGS.model_copy(update={step: getattr(SETTINGS, step).model_copy(update=settings)})


def test_nothing_is_computed_twice(pipeline, ran):
    pipeline.measure(SETTINGS)
    assert ran == []


@pytest.mark.parametrize(
    ("settings", "computed"),
    [
        (changed("calls", threshold_sd=3.0), ["detect_spontaneous", "count_releases"]),
        (changed("quanta", n_max=3), ["fit_release", "count_releases"]),
        (changed("pairs", bootstrap=300), ["fit_release", "count_releases"]),
        (
            changed("responses", slope=True),
            ["measure_responses", "detect_spontaneous", "fit_release", "count_releases"],
        ),
        (
            changed("responses", background_um=2.0),
            [
                "lay_footprints",
                "extract_traces",
                "measure_responses",
                "detect_spontaneous",
                "fit_release",
                "count_releases",
            ],
        ),
    ],
    ids=["threshold", "sites", "pairs", "slope", "background"],
)
def test_a_setting_brings_only_what_rests_on_it(pipeline, ran, settings, computed):
    pipeline.measure(settings)
    assert ran == computed


def test_other_settings_of_detection_keep_the_response_maps(pipeline, ran):
    pipeline.measure(changed("detection", false_discovery=0.01))
    assert ran[0] == "find_sites"


def test_an_excluded_trial_leaves_the_traces_alone(pipeline, ran):
    before = pipeline.measure(SETTINGS)
    after = pipeline.measure(SETTINGS, edits=HandEdits().exclude(2, "focus lost"))
    assert ran == ["fit_release", "count_releases"]
    assert np.isnan(after.amplitudes.amplitude[:, 1]).all()
    rows = put_together(after, pipeline=pipeline).responses
    left_out = rows[rows.trial == 2]
    assert (left_out.used == 0).all()
    assert (left_out.reason == "focus lost").all()
    assert left_out.amplitude.notna().all()
    assert (after.counts.calls.n_trials == before.counts.calls.n_trials - 1).all()


def test_a_bouton_added_by_hand_is_read_alone(recording, pipeline, ran, monkeypatch):
    before = pipeline.measure(SETTINGS)
    read = []
    extract = trace_step.extract_traces

    def watched(*args, footprints, **kwargs):
        read.append(len(footprints.y_px))
        return extract(*args, footprints=footprints, **kwargs)

    monkeypatch.setattr(trace_step, "extract_traces", watched)
    after = pipeline.measure(SETTINGS, edits=HandEdits().add(30.0, 40.0))
    assert read[0] < len(after.places.bouton)
    assert after.places.found_by[-1] == "hand"
    assert after.places.bouton.tolist() == [*before.places.bouton, before.places.bouton.max() + 1]


def test_a_deleted_bouton_keeps_the_ids_of_the_others(pipeline):
    before = pipeline.measure(SETTINGS).places
    place = float(before.footprints.y_px[0]), float(before.footprints.x_px[0])
    after = pipeline.measure(SETTINGS, edits=HandEdits().delete(place)).places
    assert after.bouton.tolist() == before.bouton[1:].tolist()


def test_edits_hold_when_boutons_are_looked_for_again(pipeline):
    before = pipeline.measure(SETTINGS).places
    place = float(before.footprints.y_px[0]), float(before.footprints.x_px[0])
    edits = HandEdits().delete(place).add(30.0, 40.0)
    again = pipeline.measure(changed("detection", false_discovery=0.02), edits=edits).places
    away = np.hypot(again.footprints.y_px - place[0], again.footprints.x_px - place[1])
    assert away.min() > 2.0
    assert "hand" in again.found_by


def test_a_drawn_axon_orders_the_boutons(recording):
    along = Pipeline(*recording, axon=np.array([[18.0, 60.0], [18.0, 2.0]])).measure(SETTINGS).places
    assert np.all(np.diff(along.axon_um) > 0)
    assert np.all(np.diff(along.footprints.x_px) < 0)


def test_an_analysis_can_be_ended_between_and_taken_up_again(recording, ran):
    class Ended(Exception):
        pass

    def end_after_the_maps(done, total):
        if "map_responses" in ran and done / total > 0.6:
            raise Ended("here")

    made = Pipeline(*recording)
    with pytest.raises(Ended, match="here"):
        made.measure(SETTINGS, progress=end_after_the_maps)
    ran.clear()
    made.measure(SETTINGS)
    assert "look_at_recording" not in ran
    assert "map_responses" not in ran


def test_an_axon_drawn_later_orders_the_boutons_without_looking_for_them_again(pipeline, ran):
    pipeline.axon = np.array([[18.0, 60.0], [18.0, 2.0]])
    x_px = pipeline.sites(SETTINGS, edits=HandEdits()).x_px
    assert np.all(np.diff(x_px) < 0)
    assert ran == []
    assert pipeline.trace(SETTINGS).places.footprints.x_px == pytest.approx(x_px)
    assert "find_sites" not in ran
    pipeline.axon = None
    assert np.isnan(pipeline.sites(SETTINGS, edits=HandEdits()).axon_px).all()


def test_traces_come_before_the_rest_and_are_not_read_again(pipeline, ran):
    edits = HandEdits().add(30.0, 40.0)
    traced = pipeline.trace(SETTINGS, edits=edits)
    assert ran == ["lay_footprints", "extract_traces"]
    measured = pipeline.measure(SETTINGS, edits=edits)
    assert measured.f is traced.f
    assert ran[2:] == ["measure_responses", "detect_spontaneous", "fit_release", "count_releases"]


def test_places_after_an_edit_are_known_before_anything_is_measured(pipeline, ran):
    edits = HandEdits().add(30.0, 40.0)
    sites = pipeline.sites(SETTINGS, edits=edits)
    assert ran == []
    places = pipeline.trace(SETTINGS, edits=edits).places
    assert sites.bouton.tolist() == places.bouton.tolist()
    assert sites.y_px.tolist() == places.footprints.y_px.tolist()
    assert Pipeline(pipeline.movie, pipeline.protocol).sites(SETTINGS, edits=edits) is None


def test_pixels_drawn_beyond_the_border_are_left_out(pipeline):
    edits = HandEdits().add(0.0, 40.0, ((-1, 40), (0, 40), (0, 41), (1, 40)))
    sites = pipeline.sites(SETTINGS, edits=edits)
    assert sites.drawn[-1].tolist() == [[0, 40], [0, 41], [1, 40]]


def test_a_change_by_hand_does_not_decide_where_boutons_are_found(recording, ran, monkeypatch):
    # Looked for with a decay far from the true one, the boutons are looked for again with the fitted one.
    monkeypatch.setattr(pipeline_module, "guess_shape", lambda *_, **__: SLOW)
    made = Pipeline(*recording)
    before = made.trace(SETTINGS).places
    assert ran.count("map_responses") == 2
    ran.clear()
    edits = HandEdits().add(30.0, 40.0)
    after = made.trace(SETTINGS, edits=edits).places
    assert "map_responses" not in ran
    assert after.footprints.x_px[:-1] == pytest.approx(before.footprints.x_px)
    afresh = Pipeline(*recording).trace(SETTINGS, edits=edits).places
    assert afresh.footprints.x_px.tolist() == after.footprints.x_px.tolist()


def test_a_moved_bouton_keeps_its_id(pipeline):
    before = pipeline.sites(SETTINGS, edits=HandEdits())
    places = [(float(y), float(x)) for y, x in zip(before.y_px, before.x_px, strict=True)]
    edits = HandEdits().add(30.0, 40.0).move(places[0], (places[0][0] + 2.0, places[0][1]))
    after = pipeline.sites(SETTINGS, edits=edits)
    assert after.bouton.tolist() == [*before.bouton, before.bouton.max() + 1]
    assert after.found_by[0] == after.found_by[-1] == "hand"
    merged = pipeline.sites(SETTINGS, edits=HandEdits().merge((places[1], places[2])))
    assert merged.bouton.tolist() == np.delete(before.bouton, 2).tolist()
