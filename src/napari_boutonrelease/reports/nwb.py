"""The results as one file of the open standard Neurodata Without Borders (Rübel et al. 2022, eLife 11:e78362)."""

from __future__ import annotations

import json
import uuid
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.columns import TABLES
from ..recording.start_time import recording_start
from .arrays import weight_pages
from .facts import frame_interval_s, pixel_size_um, texts, values
from .nwb_details import NwbDetails
from .nwb_tables import interval_columns, make_column, make_intervals, make_table, sentence
from .strict_json import json_ready

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import ArrayLike, NDArray
    from pynwb import NWBFile, ProcessingModule
    from pynwb.ophys import ImagingPlane, PlaneSegmentation

    from ..analysis.results import AnalysisResult

_PIXEL = np.dtype([("x", np.uint32), ("y", np.uint32), ("weight", np.float32)])
_STIMULI = "trials"  # the table that becomes intervals of time, not a plain table
_KEYWORDS = ("axon", "synaptic bouton", "vesicle release", "release probability", "quantal analysis", "imaging")


def write_nwb(result: AnalysisResult, path: Path, *, details: NwbDetails) -> None:
    """Write masks, traces, stimuli, trials, tables, mean image and provenance as NWB.

    Parameters
    ----------
    result : AnalysisResult
        What was found.
    path : Path
        File to write.
    details : NwbDetails
        What the standard asks for and no movie tells.
    """
    from pynwb import NWBHDF5IO

    file = _file(result, details)
    plane = _imaging_plane(file, result, details)
    _add_stimuli(file, result)
    module = file.create_processing_module("ophys", "Boutons, their traces and releases, and the tables of the results")
    if np.isfinite(result.mean_image).any():
        _add_mean_image(module, result)
    if len(result.boutons):
        _add_traces(module, _add_masks(module, plane, result), result)
    for name, table in TABLES.items():
        frame: pd.DataFrame = getattr(result, name)
        if name != _STIMULI and len(frame):
            module.add(make_table(name, sentence(table.meaning), frame, columns=table.columns))
    with NWBHDF5IO(path, "w") as io:
        io.write(file)


def _file(result: AnalysisResult, details: NwbDetails) -> NWBFile:
    from pynwb import NWBFile
    from pynwb.file import Subject

    start, start_words = _session_start(result, details)
    notes = json.dumps(
        json_ready({"analysis": result.provenance, "summary": result.summary, "cautions": result.cautions}),
        ensure_ascii=False,
    )
    n_files = len(result.provenance.get("movie", {}).get("files", ()))
    joined = f" Its {n_files} files follow one another without the gaps between them." if n_files > 1 else ""
    return NWBFile(
        session_description=f"Evoked transmitter release along one axon, movie {result.name}.{joined} Times are in s "
        f"from the start of the first frame. session_start_time is {start_words}.",
        # The same analysis keeps its name however often it is written, another never gets it.
        identifier=str(uuid.uuid5(uuid.NAMESPACE_OID, f"{result.name} {start.isoformat()} {notes}")),
        session_start_time=start,
        session_id=result.name.replace("/", "-"),
        experiment_description=_experiment(result, details),
        experimenter=details.experimenter and [details.experimenter],
        institution=details.institution,
        keywords=list(_KEYWORDS),
        notes=notes,
        subject=Subject(
            subject_id=details.subject_id or "unknown",
            species=details.species,
            sex=details.sex or "U",
            age=details.age or "P0D/",
            description=_subject_words(details),
        ),
    )


def _session_start(result: AnalysisResult, details: NwbDetails) -> tuple[datetime, str]:
    """Return when the session began, and in words how that is known."""
    given = details.start()
    if given is not None:
        return given, "as given for this file"
    files = result.provenance.get("movie", {}).get("files", ())
    try:
        start, found_in = recording_start(Path(files[0]))
    except (OSError, IndexError):
        created = result.provenance.get("created")
        start = datetime.fromisoformat(created).astimezone() if created else datetime.now().astimezone()
        return start, "when the movie was analysed, since the time of the recording is not known"
    if found_in == "last change of the file":
        return start, "when the movie's file was last changed, since it holds no date of the recording"
    return start, f"the movie's own date ({found_in})"


def _experiment(result: AnalysisResult, details: NwbDetails) -> str:
    trials, pulses = result.stimulus_s.shape
    version = result.provenance.get("versions", {}).get("napari-boutonrelease", "of unknown version")
    parts = [
        f"The axon was stimulated in {trials} trials (pulses in a trial: {pulses}); every bouton's responses were "
        "fitted with one time course and its release described by a binomial model. "
        f"Analysed with napari-boutonrelease {version}.",
        "The notes hold all settings, the summary and the cautions, as JSON.",
        *result.cautions,
    ]
    if details.unknown:
        parts.append(f"Not given for this file: {', '.join(details.unknown)}.")
    return " ".join(parts)


def _subject_words(details: NwbDetails) -> str:
    signs = {"subject id": "subject_id 'unknown'", "sex": "sex 'U'", "age": "age 'P0D/'"}
    shown = [signs[name] for name in details.unknown if name in signs]
    words = "The animal or culture whose axon was recorded."
    return f"{words} {', '.join(shown)} stand for what was not given." if shown else words


def _imaging_plane(file: NWBFile, result: AnalysisResult, details: NwbDetails) -> ImagingPlane:
    from pynwb.ophys import OpticalChannel

    interval, size_um = frame_interval_s(result), pixel_size_um(result)
    return file.create_imaging_plane(
        name="ImagingPlane",
        description="The plane in which the axon lies; wavelengths were not given and are NaN",
        optical_channel=OpticalChannel(
            name="OpticalChannel", description="Light of the reporter; wavelength not given", emission_lambda=np.nan
        ),
        device=file.create_device(name="Microscope", description="Microscope; make and model were not given"),
        excitation_lambda=np.nan,
        indicator=details.reporter or "unknown",
        location=details.location or "unknown",
        imaging_rate=1 / interval if interval > 0 else None,
        grid_spacing=None if size_um is None else [size_um, size_um],
        grid_spacing_unit="micrometers",
    )


def _add_stimuli(file: NWBFile, result: AnalysisResult) -> None:
    """Add a row a pulse, and a row a trial with whether it counts; both in order of time."""
    frame = result.trials.sort_values("stimulus_s", kind="stable")
    if not len(frame):
        return
    end_s = float(result.time_s[-1]) + np.nan_to_num(frame_interval_s(result))
    pulse_words = ("time of the pulse", "time of the next pulse, or the end of the recording")
    times = interval_columns(values(frame, "stimulus_s"), end_s, pulse_words)
    rest = [column for column in TABLES[_STIMULI].columns if column.name != "stimulus_s"]
    file.add_time_intervals(make_table("stimuli", "A row a pulse that was given", frame, columns=rest, times=times))

    by_trial = frame.assign(reason=texts(frame, "reason")).groupby("trial", sort=False)
    trials = by_trial.agg(
        start=("stimulus_s", "min"),
        pulses=("pulse", "size"),
        pulses_used=("used", "sum"),
        reason=("reason", lambda why: "; ".join(dict.fromkeys(one for one in why if one))),
    ).reset_index()
    trial_words = ("time of the trial's first pulse", "first pulse of the next trial, or the end of the recording")
    columns = {
        "trial": "trial number, from 1",
        "pulses": "pulses that were given",
        "pulses_used": "pulses that count in the estimates",
        "used": "whether any of its pulses counts in the estimates",
        "reason": "why pulses of the trial were left out, empty where all count",
    }
    trials["used"] = trials["pulses_used"] > 0
    data = [make_column(name, words, trials[name].tolist()) for name, words in columns.items()]
    file.trials = make_intervals(
        "trials", "A row a trial", [*interval_columns(values(trials, "start"), end_s, trial_words), *data]
    )


def _add_mean_image(module: ProcessingModule, result: AnalysisResult) -> None:
    from pynwb.base import Images
    from pynwb.image import GrayscaleImage

    size_um = pixel_size_um(result)
    image = GrayscaleImage(
        name="mean_image",
        data=_packed(np.asarray(result.mean_image, dtype=np.float32).T),  # the standard has x first
        resolution=None if size_um is None else 1e4 / size_um,
        description="Mean of the frames, movement taken out (counts), as (x, y); resolution in pixels per cm",
    )
    module.add(Images(name="images", images=[image], description="What the recording shows on average"))


def _add_masks(module: ProcessingModule, plane: ImagingPlane, result: AnalysisResult) -> PlaneSegmentation:
    """Add weights and cores of the boutons; return the former, by which the traces were read."""
    from pynwb.ophys import ImageSegmentation

    label, ids = result.footprints.label, result.boutons["bouton"].to_numpy(np.int64)
    height, width = label.shape
    cores = [_pixels(*np.nonzero(label == bouton), weight=1.0) for bouton in ids]
    weights = []
    for page in weight_pages(result.footprints, (height, width)):
        rows, columns = np.nonzero(np.isfinite(page) & (page != 0))
        weights.append(_pixels(rows, columns, weight=page[rows, columns]))
    read = _masks(
        "Footprints",
        "Extraction weights of each bouton (id: bouton id): the sum of weight times frame, over the pixels, is its "
        "brightness above the local background; weights around it are negative where they take off the background",
        plane,
        weights,
        ids,
    )
    seen = _masks("Cores", "Core pixels of each bouton (id: bouton id), of half its peak or more", plane, cores, ids)
    module.add(ImageSegmentation(name="ImageSegmentation", plane_segmentations=[read, seen]))
    return read


def _pixels(rows: NDArray[Any], columns: NDArray[Any], *, weight: ArrayLike) -> NDArray[np.void]:
    mask = np.empty(len(rows), dtype=_PIXEL)
    mask["x"], mask["y"], mask["weight"] = columns, rows, weight
    return mask


def _masks(
    name: str, description: str, plane: ImagingPlane, masks: list[NDArray[np.void]], ids: NDArray[np.int64]
) -> PlaneSegmentation:
    from hdmf.common import VectorData, VectorIndex
    from pynwb.ophys import PlaneSegmentation

    pixels = VectorData(
        name="pixel_mask", description="x (column), y (row), from 0, and weight", data=np.concatenate(masks)
    )
    ends = np.cumsum([len(mask) for mask in masks])
    return PlaneSegmentation(
        name=name,
        description=description,
        imaging_plane=plane,
        id=ids,
        columns=[pixels, VectorIndex(name="pixel_mask_index", target=pixels, data=ends)],
        colnames=["pixel_mask"],
    )


def _add_traces(module: ProcessingModule, masks: PlaneSegmentation, result: AnalysisResult) -> None:
    from pynwb.ophys import DfOverF, Fluorescence, RoiResponseSeries

    clock = _clock(result.time_s)

    def series(name: str, traces: NDArray[np.float64], unit: str, description: str) -> RoiResponseSeries:
        rois = masks.create_roi_table_region(
            description="the boutons, in the order of their ids", region=list(range(len(masks)))
        )
        return RoiResponseSeries(
            name=name,
            data=_packed(np.asarray(traces, dtype=np.float32).T),
            unit=unit,
            rois=rois,
            description=f"{description}; (frame, bouton), NaN in frames that were left out",
            comments="A frame's time is that of its start.",
            **clock,
        )

    fluorescence, relative = Fluorescence(name="Fluorescence"), DfOverF(name="DfOverF")
    for group in (fluorescence, relative):
        module.add(group)  # before its traces, which must be in the same file as their masks
    fluorescence.add_roi_response_series(series("f", result.f, "counts", "Brightness F above the local background"))
    fluorescence.add_roi_response_series(series("f0", result.f0, "counts", "Baseline F0 of the brightness"))
    relative.add_roi_response_series(series("dff", result.dff, "dF/F", "F / F0 - 1"))


def _clock(time_s: NDArray[np.float64]) -> dict[str, Any]:
    """Rate and start where the frames follow at one interval, else all times."""
    steps = np.diff(time_s)
    if len(steps) and np.allclose(steps, steps.mean(), rtol=0, atol=1e-6 * steps.mean()):
        return {"rate": 1 / float(steps.mean()), "starting_time": float(time_s[0])}
    return {"timestamps": np.asarray(time_s, dtype=np.float64)}


def _packed(data: NDArray[Any]) -> Any:
    from hdmf.backends.hdf5.h5_utils import H5DataIO

    return H5DataIO(data, compression="gzip")
