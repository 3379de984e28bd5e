"""Recordings as laboratories have them, from files to numbers: what is messy but sound must not cost anything."""

from __future__ import annotations

import shutil
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import tifffile

import napari_boutonrelease as br
from napari_boutonrelease.recording import write_protocol
from napari_boutonrelease.simulation import read_truth, write_simulation

JITTER_S = np.random.default_rng(3).uniform(0.0, 0.1, 24)

SOUND = {
    "rolling shutter": {"row_time_s": 0.0003},
    "exposure shorter than the frame interval": {"exposure_s": 0.004},
    "electron-multiplying camera": {"electron_multiplying": True},
    "half of the light bleached": {"bleached": 0.5},
    "jumps of the sample": {"drift_jumps": 4, "drift_jump_px": 2.0},
    "real numbers": {"dtype": "float32", "bit_depth": 32},
    "8 bits": {"dtype": "uint8", "bit_depth": 8, "gain": 0.5, "offset_counts": 10.0},
    "light off now and then": {"dark_frames": (*range(5), *range(300, 360), 700, 1001)},
    "a saturated speck": {"saturated_specks": 1},
    "irregular pulses": {
        "pulse_table_s": tuple(
            tuple(0.4 + 0.6 * trial + jitter + 0.05 * pulse for pulse in range(1 + trial % 3))
            for trial, jitter in enumerate(JITTER_S.tolist())
        )
    },
}


def rows_of_boutons(analysis, truth):
    """Rows of the table at the true boutons, in their order; positions count from where the reference lies."""
    used = analysis.drift.used == 1
    dy = np.median((analysis.drift.dy_px - truth.dy_px)[used])
    dx = np.median((analysis.drift.dx_px - truth.dx_px)[used])
    rows = []
    for spot in truth.boutons:
        away = np.hypot(analysis.boutons.y_px + dy - truth.y_px[spot], analysis.boutons.x_px + dx - truth.x_px[spot])
        assert away.min() < 0.5
        rows.append(analysis.boutons.loc[away.idxmin()])
    return rows


def assert_recovered(analysis, truth):
    """Timing, calls trial by trial, release and amplitudes of every bouton agree with what happened."""
    np.testing.assert_allclose(analysis.stimulus_s, truth.stimulus_s, atol=1e-6)
    assert analysis.shape_from == "recording"
    assert analysis.shape.decay_s == pytest.approx(0.06, rel=0.2)
    for spot, row in zip(truth.boutons, rows_of_boutons(analysis, truth), strict=True):
        first = analysis.responses[(analysis.responses.bouton == row.bouton) & (analysis.responses.pulse == 1)]
        first = first[first.used == 1]
        trial = first.trial.to_numpy() - 1
        released = truth.vesicles[spot, trial, 0] > 0
        assert np.mean((first.p_released > 0.5) == released) > 0.95
        assert row.p_release == pytest.approx(released.mean(), abs=0.1)
        assert row.p_release_lo <= released.mean() <= row.p_release_hi
        true_mean = truth.amplitude_dff[spot, trial, 0].mean()
        assert row.amplitude_mean == pytest.approx(
            true_mean, abs=0.15 * true_mean + 4 * row.noise_sd / len(trial) ** 0.5
        )


@pytest.fixture(scope="module")
def recording(tmp_path_factory, simulate, write_files):
    """The plain recording that the variants are variants of, with its files."""
    simulation = simulate()
    return simulation, write_files(tmp_path_factory.mktemp("plain"), simulation.frames, simulation.protocol)


@pytest.fixture(scope="module")
def plain(recording, quick):
    files = recording[1]
    return br.analyse(files.movie, files.protocol, settings=quick)


@pytest.fixture(scope="module")
def sound(tmp_path_factory, simulate, write_files, quick):
    """Analyse each sound recording once: (analysis, truth) by name."""
    done = {}

    def analyse(name):
        if name not in done:
            simulation = simulate(**SOUND[name])
            files = write_files(tmp_path_factory.mktemp("sound"), simulation.frames, simulation.protocol)
            done[name] = br.analyse(files.movie, files.protocol, settings=quick), simulation.truth
        return done[name]

    return analyse


def test_a_plain_recording_is_recovered(plain, recording):
    assert_recovered(plain, recording[0].truth)
    assert len(plain.boutons) == 3


@pytest.mark.parametrize("name", SOUND)
def test_a_messy_but_sound_recording_is_recovered(sound, name):
    assert_recovered(*sound(name))


def test_jumps_are_followed(sound):
    analysis, truth = sound("jumps of the sample")
    assert np.ptp(truth.dy_px) > 2
    for found, true in ((analysis.drift.dy_px, truth.dy_px), (analysis.drift.dx_px, truth.dx_px)):
        assert np.std(found - true) < 0.05


def test_bleaching_is_reported_and_warned_of(sound):
    analysis, _ = sound("half of the light bleached")
    assert analysis.summary["quality"]["bleaching"] == pytest.approx(0.5, abs=0.05)
    assert any("light was lost" in caution for caution in analysis.cautions)


def test_dark_frames_are_left_out_with_the_trials_they_hide(sound):
    analysis, truth = sound("light off now and then")
    dark = list(truth.recipe.dark_frames)
    assert analysis.drift.frame[analysis.drift.used == 0].tolist() == dark
    assert np.isnan(analysis.dff[:, dark]).all()
    hidden = analysis.responses[analysis.responses.used == 0]
    assert set(hidden.trial) == {6}  # stimulated in frame 340, in the dark
    assert set(hidden.reason) == {"frames missing"}


def test_a_saturated_speck_is_no_bouton_without_a_flag(sound):
    analysis, truth = sound("a saturated speck")
    real = {row.bouton for row in rows_of_boutons(analysis, truth)}
    others = analysis.boutons[~analysis.boutons.bouton.isin(real)]
    assert all({"saturated", "dead_pixels"} & set(cell.split(";")) for cell in others["flags"])
    assert analysis.summary["quality"]["saturated_px"] + analysis.summary["quality"]["dead_px"] > 0


def test_trials_of_different_length_keep_their_pulses(sound):
    analysis, truth = sound("irregular pulses")
    per_trial = analysis.responses[analysis.responses.bouton == 1].groupby("trial").size()
    assert per_trial.tolist() == np.isfinite(truth.stimulus_s).sum(axis=1).tolist()
    assert (analysis.pulses.groupby("pulse").trials.first() == [24, 16, 8]).all()


def _ome_in_ms_and_nm(frames, path):
    units = {"TimeIncrement": 10.0, "TimeIncrementUnit": "ms"}
    for side in "XY":
        units |= {f"PhysicalSize{side}": 180.0, f"PhysicalSize{side}Unit": "nm"}
    tifffile.imwrite(path, frames, photometric="minisblack", ome=True, metadata={"axes": "TYX", **units})


def test_units_of_ome_are_understood(recording, plain, quick, tmp_path):
    simulation, _ = recording
    _ome_in_ms_and_nm(simulation.frames, tmp_path / "axon.ome.tif")
    silent = replace(simulation.protocol, frame_interval_s=None, pixel_size_um=None, exposure_s=None, row_time_s=None)
    write_protocol(silent, tmp_path / "axon.protocol.toml")
    analysis = br.analyse(tmp_path / "axon.ome.tif", tmp_path / "axon.protocol.toml", settings=quick)
    assert analysis.name == "axon"
    assert analysis.summary["recording"]["frame_interval_s"] == pytest.approx(0.01)
    assert analysis.summary["recording"]["pixel_size_um"] == pytest.approx(0.18)
    assert analysis.summary["recording"]["found_in"]["frame_interval_s"] == "OME TimeIncrement"
    assert analysis.boutons.equals(plain.boutons)


@pytest.mark.parametrize("compression", ["deflate", "lzw", "zstd"])
def test_packing_changes_nothing(recording, plain, quick, write_files, tmp_path, compression):
    simulation, _ = recording
    files = write_files(tmp_path, simulation.frames, simulation.protocol, compression=compression)
    assert br.analyse(files.movie, files.protocol, settings=quick).boutons.equals(plain.boutons)


def test_the_channel_asked_for_is_analysed(recording, plain, quick, write_files, tmp_path):
    simulation, _ = recording
    other = np.random.default_rng(2).poisson(30, simulation.frames.shape).astype(np.uint16)
    both = np.stack([other, simulation.frames], axis=1)
    files = write_files(tmp_path, both, simulation.protocol, imagej=True, metadata={"axes": "TCYX"})
    second = quick.model_copy(update={"recording": quick.recording.model_copy(update={"channel": 1})})
    assert br.analyse(files.movie, files.protocol, settings=second).boutons.equals(plain.boutons)


@pytest.fixture(scope="module")
def trials(tmp_path_factory, simulate):
    """A folder of one file a trial, with seconds between them that were not recorded."""
    recipe = simulate(trials=1).truth.recipe
    folder = tmp_path_factory.mktemp("trials")
    gapped = replace(recipe, trials=24, file_s=0.6, trial_interval_s=4.0)
    files = write_simulation(folder / "trials.tif", gapped, rng=np.random.default_rng(1), overwrite=False)
    return files, read_truth(files.truth)


@pytest.fixture(scope="module")
def of_trials(trials, quick):
    files = trials[0]
    return br.analyse(files.movie, files.protocol, settings=quick)


def test_one_file_a_trial_is_recovered(trials, of_trials):
    files, truth = trials
    assert (files.movie / "trial_10.tif").exists()
    assert (files.movie / "trial_2.tif").exists()
    assert_recovered(of_trials, truth)


def test_the_order_of_files_on_disk_does_not_matter(trials, of_trials, quick, tmp_path, monkeypatch):
    files, _ = trials
    copied = tmp_path / "trials"
    copied.mkdir()
    order = np.random.default_rng(4).permutation(sorted(file.name for file in files.movie.iterdir()))
    for name in order:
        shutil.copyfile(files.movie / name, copied / name)
    monkeypatch.setattr(Path, "iterdir", lambda folder: iter([folder / name for name in order]))
    shuffled = br.analyse(copied, files.protocol, settings=quick)
    assert shuffled.responses.equals(of_trials.responses)


@pytest.fixture(scope="module")
def places(tmp_path_factory, recording):
    """Files of the true places: positions in px and in µm, a label image, a path that runs from right to left."""
    truth = recording[0].truth
    folder = tmp_path_factory.mktemp("places")
    ids = (7, 3, 12)
    rows = "".join(f"{b},{y},{x}\n" for b, y, x in zip(ids, truth.y_px, truth.x_px, strict=True))
    (folder / "px.csv").write_text("bouton,y_px,x_px\n" + rows, encoding="utf-8")
    rows = "".join(f"{y};{x}\n" for y, x in zip(truth.y_um, truth.x_um, strict=True))
    (folder / "um.csv").write_text("\ufeffy_um;x_um\n" + rows, encoding="utf-8")
    (folder / "axon.csv").write_text("y_px,x_px\n16,60\n16,40\n15,4\n", encoding="utf-8")
    row, column = np.mgrid[:32, :64]
    label = np.zeros((32, 64), dtype=np.uint8)
    for b, y, x in zip(ids, truth.y_px, truth.x_px, strict=True):
        label[np.hypot(row - y, column - x) <= 2.5] = b
    tifffile.imwrite(folder / "label.tif", label)
    return folder


@pytest.mark.parametrize(("file", "ids"), [("px.csv", [3, 7, 12]), ("um.csv", [1, 2, 3]), ("label.tif", [3, 7, 12])])
def test_given_boutons_keep_their_ids_and_are_recovered(recording, places, quick, file, ids):
    simulation, files = recording
    analysis = br.analyse(files.movie, files.protocol, settings=quick, boutons=places / file)
    assert_recovered(analysis, simulation.truth)
    assert analysis.boutons.bouton.tolist() == ids
    assert set(analysis.boutons.found_by) == {"file"}
    assert set(np.unique(analysis.footprints.label)) == {0, *ids}
    by_id = analysis.boutons.set_index("bouton")
    if 7 in ids:
        assert by_id.x_px[7] == pytest.approx(12.0, abs=0.1)
    assert by_id.y_um.to_numpy() == pytest.approx(by_id.y_px.to_numpy() * 0.18)


def test_boutons_are_numbered_along_the_axon(recording, places, quick):
    simulation, files = recording
    analysis = br.analyse(files.movie, files.protocol, settings=quick, axon=places / "axon.csv")
    assert_recovered(analysis, simulation.truth)
    assert analysis.boutons.bouton.tolist() == [1, 2, 3]
    assert analysis.boutons.x_px.is_monotonic_decreasing
    along_um = [0.18 * (60 - 51), 0.18 * (20 + 8), 0.18 * (20 + 28)]
    assert analysis.boutons.axon_um.to_numpy() == pytest.approx(along_um, abs=0.1)
    assert (analysis.boutons.axon_offset_um < 0.3).all()
