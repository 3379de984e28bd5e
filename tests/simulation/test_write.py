import numpy as np
import pytest
import tifffile

from napari_boutonrelease.errors import InputError, OutputError
from napari_boutonrelease.recording.protocol import read_protocol
from napari_boutonrelease.simulation import Recipe, read_truth, simulate_recording, write_simulation

SMALL = Recipe(height_px=32, width_px=64, n_boutons=2, trials=3, pulses=2)
FILES = Recipe(height_px=32, width_px=64, n_boutons=2, trials=11, file_s=0.3, first_s=0.1, trial_interval_s=2.0)


def rng():
    return np.random.default_rng(7)


@pytest.mark.parametrize("dtype", ["uint16", "uint8", "float32"])
def test_movie_protocol_and_truth_are_those_of_the_same_seed_in_memory(dtype, tmp_path):
    recipe = Recipe(height_px=32, width_px=64, n_boutons=2, trials=2, dtype=dtype, bit_depth=8)
    files = write_simulation(tmp_path / "sub" / "axon.tif", recipe, rng=rng(), overwrite=False)
    wanted = simulate_recording(recipe, rng=rng())
    assert np.array_equal(tifffile.imread(files.movie), wanted.frames)
    assert read_protocol(files.protocol) == wanted.protocol
    assert np.array_equal(read_truth(files.truth).vesicles, wanted.truth.vesicles)
    assert sorted(path.name for path in (tmp_path / "sub").iterdir()) == [
        "axon.protocol.toml",
        "axon.tif",
        "axon.truth.json",
    ]


def test_movie_states_frame_interval_and_pixel_size(tmp_path):
    files = write_simulation(tmp_path / "axon.tif", SMALL, rng=rng(), overwrite=False)
    with tifffile.TiffFile(files.movie) as tiff:
        assert tiff.series[0].axes == "TYX"
        assert tiff.imagej_metadata["finterval"] == pytest.approx(0.01)
        per_um, unit = tiff.pages[0].tags["XResolution"].value, tiff.imagej_metadata["unit"]
    assert per_um[1] / per_um[0] == pytest.approx(0.18, rel=1e-4)
    assert unit == "um"


def test_one_file_a_trial_goes_into_a_folder(tmp_path):
    files = write_simulation(tmp_path / "axon.tif", FILES, rng=rng(), overwrite=False)
    assert files.movie == tmp_path / "axon"
    names = [f"trial_{number}.tif" for number in range(1, 12)]
    assert {path.name for path in files.movie.iterdir()} == set(names)
    movie = np.concatenate([tifffile.imread(files.movie / name) for name in names])
    assert np.array_equal(movie, simulate_recording(FILES, rng=rng()).frames)


def test_irregular_pulses_are_written_as_a_table(tmp_path):
    recipe = Recipe(height_px=32, width_px=64, n_boutons=2, pulse_table_s=((0.1, 0.2), (0.9,)))
    files = write_simulation(tmp_path / "axon.tif", recipe, rng=rng(), overwrite=False)
    assert read_protocol(files.protocol).stimuli.time_s.tolist() == [0.1, 0.2, 0.9]


def test_existing_files_are_kept_unless_asked(tmp_path):
    path = tmp_path / "axon.tif"
    path.write_text("mine")
    with pytest.raises(OutputError, match=r"axon\.tif exists already"):
        write_simulation(path, SMALL, rng=rng(), overwrite=False)
    assert path.read_text() == "mine"
    write_simulation(path, SMALL, rng=rng(), overwrite=True)
    assert len(tifffile.imread(path)) == SMALL.n_frames


def test_a_folder_of_trials_is_replaced_whole(tmp_path):
    write_simulation(tmp_path / "axon.tif", FILES, rng=rng(), overwrite=False)
    fewer = Recipe(height_px=32, width_px=64, n_boutons=2, trials=2, file_s=0.3, first_s=0.1, trial_interval_s=2.0)
    files = write_simulation(tmp_path / "axon.tif", fewer, rng=rng(), overwrite=True)
    assert {path.name for path in files.movie.iterdir()} == {"trial_1.tif", "trial_2.tif"}


def test_stopping_half_way_leaves_what_was_there(tmp_path):
    def stop(done, total):
        if done > total // 2:
            raise RuntimeError("stopped by hand")

    write_simulation(tmp_path / "axon.tif", SMALL, rng=rng(), overwrite=False)
    before = {path.name: path.read_bytes() for path in tmp_path.iterdir()}
    with pytest.raises(RuntimeError, match="stopped by hand"):
        write_simulation(tmp_path / "axon.tif", SMALL, rng=np.random.default_rng(8), overwrite=True, progress=stop)
    assert {path.name: path.read_bytes() for path in tmp_path.iterdir()} == before


def test_a_movie_that_is_no_tiff_is_refused(tmp_path):
    with pytest.raises(InputError, match=r"must end in \.tif or \.tiff \(given 'axon\.avi'\)"):
        write_simulation(tmp_path / "axon.avi", SMALL, rng=rng(), overwrite=False)


def test_a_place_that_cannot_be_written_is_named(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match=r"axon\.tif cannot be written"):
        write_simulation(tmp_path / "file" / "axon.tif", SMALL, rng=rng(), overwrite=False)
