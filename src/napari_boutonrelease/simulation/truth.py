"""What really happened in a simulated recording, and its way to a file and back."""

from __future__ import annotations

import json
from dataclasses import dataclass, fields
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import InputError
from .recipe import Recipe, recipe_from_dict

if TYPE_CHECKING:
    from numpy.typing import NDArray

_VERSION = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class Truth:
    """The state behind a movie. Spots are the boutons in order along the axon, then the specks.

    Times are on the recording's clock (file after file without gaps) unless said otherwise. Positions are those at mean
    drift: spot b lies at `(y_px[b] + dy_px[i], x_px[b] + dx_px[i])` in frame i.

    Attributes
    ----------
    recipe : Recipe
        What it was made from.
    kind : tuple of str
        `releasing`, `silent` (a bouton that never releases) or `speck`, spot by spot.
    y_px, x_px, y_um, x_um : (n_spots,) ndarray
        Positions.
    axon_um : (n_spots,) ndarray
        Distance along the axon from where it enters the image; NaN for specks.
    f0_photons : (n_spots,) ndarray
        Photons a frame, at rest and before bleaching, in the peak pixel of the spot alone, were it centred on a pixel.
    n_sites : (n_spots,) ndarray of int
        Release sites; 0 for specks.
    p_site : (n_spots,) ndarray
        Release probability of a rested site (in the first trial, where release runs down).
    q_dff, q_cv : (n_spots,) ndarray
        Mean response to one vesicle (dF/F) and its CV from vesicle to vesicle.
    p_release : (n_spots,) ndarray
        Chance that pulse 1 releases, where the stimulus arrives; mean over trials.
    p_release_by_pulse, vesicles_by_pulse : (n_spots, n_pulses) ndarray
        The same for every pulse, and the mean number of vesicles.
    ppr : (n_spots,) ndarray
        Mean vesicles of pulse 2 over those of pulse 1; NaN where nothing releases or there is no pulse 2.
    p2_given_release, p2_given_failure : (n_spots,) ndarray
        Chance that pulse 2 releases after a release or a failure at pulse 1.
    stimulus_s : (n_trials, n_pulses) ndarray
        When stimuli were given; NaN where a trial has no such pulse.
    stimulus_failed : (n_trials, n_pulses) ndarray of bool
        Stimuli that reached no bouton.
    vesicles : (n_spots, n_trials, n_pulses) ndarray of int
        Vesicles released.
    amplitude_dff : (n_spots, n_trials, n_pulses) ndarray
        Sum of their responses (dF/F, before reporter saturation); NaN where there is no such pulse.
    vesicle_spot, vesicle_trial, vesicle_pulse : (n_vesicles,) ndarray of int
        Every vesicle; trial and pulse are -1 for a spontaneous one.
    vesicle_s : (n_vesicles,) ndarray
        Moment of fusion on the laboratory's clock, gaps between files included.
    vesicle_dff : (n_vesicles,) ndarray
        Response to each (dF/F at the peak).
    frame_start_s, frame_clock_s : (n_frames,) ndarray
        Start of each frame, on the recording's clock and on the laboratory's clock.
    segment : (n_frames,) ndarray of int
        File that a frame belongs to.
    light : (n_frames,) ndarray
        Light left: 1 at the start, falling with bleaching, 0 in dark frames.
    dy_px, dx_px : (n_frames,) ndarray
        Displacement of each frame; mean 0.
    axon_path_px : (n_points, 2) ndarray
        (y, x) along the axon.
    shaft_photons : (height, width) ndarray
        Photons a frame from the bare axon, without drift and bleaching.
    dead_px : (n, 2) ndarray of int
        (y, x) of pixels that show the offset only.
    """

    recipe: Recipe
    kind: tuple[str, ...]
    y_px: NDArray[np.float64]
    x_px: NDArray[np.float64]
    y_um: NDArray[np.float64]
    x_um: NDArray[np.float64]
    axon_um: NDArray[np.float64]
    f0_photons: NDArray[np.float64]
    n_sites: NDArray[np.int64]
    p_site: NDArray[np.float64]
    q_dff: NDArray[np.float64]
    q_cv: NDArray[np.float64]
    p_release: NDArray[np.float64]
    p_release_by_pulse: NDArray[np.float64]
    vesicles_by_pulse: NDArray[np.float64]
    ppr: NDArray[np.float64]
    p2_given_release: NDArray[np.float64]
    p2_given_failure: NDArray[np.float64]
    stimulus_s: NDArray[np.float64]
    stimulus_failed: NDArray[np.bool_]
    vesicles: NDArray[np.int64]
    amplitude_dff: NDArray[np.float64]
    vesicle_spot: NDArray[np.int64]
    vesicle_trial: NDArray[np.int64]
    vesicle_pulse: NDArray[np.int64]
    vesicle_s: NDArray[np.float64]
    vesicle_dff: NDArray[np.float64]
    frame_start_s: NDArray[np.float64]
    frame_clock_s: NDArray[np.float64]
    segment: NDArray[np.int64]
    light: NDArray[np.float64]
    dy_px: NDArray[np.float64]
    dx_px: NDArray[np.float64]
    axon_path_px: NDArray[np.float64]
    shaft_photons: NDArray[np.float64]
    dead_px: NDArray[np.int64]

    @property
    def boutons(self) -> NDArray[np.int64]:
        """Indices of the spots that are boutons, releasing or silent."""
        return np.flatnonzero([kind != "speck" for kind in self.kind])

    @property
    def spontaneous(self) -> tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.float64]]:
        """Spot, time (s, recording's clock) and response (dF/F) of every vesicle released without a stimulus."""
        alone = self.vesicle_trial < 0
        frame = np.searchsorted(self.frame_clock_s, self.vesicle_s[alone], side="right") - 1
        behind = self.frame_clock_s[frame] - self.frame_start_s[frame]
        return self.vesicle_spot[alone], self.vesicle_s[alone] - behind, self.vesicle_dff[alone]


def truth_to_json(truth: Truth) -> str:
    """Return the truth as JSON text; NaN becomes null."""
    values: dict[str, Any] = {"version": _VERSION}
    for field in fields(truth):
        value = getattr(truth, field.name)
        values[field.name] = value.as_dict() if isinstance(value, Recipe) else _plain(value)
    return json.dumps(values, allow_nan=False)


def read_truth(source: str | Path) -> Truth:
    """Read the truth of a simulated recording from a `.truth.json` file.

    Raises
    ------
    InputError
        If the file is not such a truth, or is written by a newer version.
    """
    path = Path(source)
    try:
        values = json.loads(path.read_text(encoding="utf-8"))
        version = values.pop("version")
        if version != _VERSION:
            raise InputError(f"{path}: truth of version {version}; this program reads version {_VERSION}.")
        wanted = {field.name: field.type for field in fields(Truth)}
        arrays = {name: _array(values[name], kind) for name, kind in wanted.items() if name not in ("recipe", "kind")}
        return Truth(
            recipe=recipe_from_dict(values["recipe"]),
            kind=tuple(values["kind"]),
            **_with_empty_axes(arrays, len(values["kind"])),
        )
    except (KeyError, AttributeError, TypeError, json.JSONDecodeError, UnicodeDecodeError) as error:
        raise InputError(
            f"{path} is not the truth of a simulated recording ({error!r}); give the .truth.json file that was written "
            "with the movie."
        ) from error


def _plain(value: Any) -> Any:
    if isinstance(value, tuple):
        return list(value)
    plain = value.astype(object)
    if value.dtype.kind == "f":
        plain[~np.isfinite(value)] = None
    return plain.tolist()


def _array(value: Any, kind: Any) -> Any:
    if "bool" in kind:
        return np.array(value, dtype=bool)
    array = np.array(value, dtype=np.float64)  # null becomes NaN
    return array.astype(np.int64) if "int64" in kind else array


def _with_empty_axes(arrays: dict[str, Any], n_spots: int) -> dict[str, Any]:
    """Give arrays without entries the axes that nested lists cannot keep."""
    stimuli: tuple[int, ...] = arrays["stimulus_s"].shape
    shapes = {
        "vesicles": (n_spots, *stimuli),
        "amplitude_dff": (n_spots, *stimuli),
        "p_release_by_pulse": (n_spots, stimuli[1]),
        "vesicles_by_pulse": (n_spots, stimuli[1]),
        "dead_px": (-1, 2),
    }
    return {name: array.reshape(shapes.get(name, array.shape)) for name, array in arrays.items()}
