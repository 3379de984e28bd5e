"""Traces of the boutons: read once for each footprint, freed of the axon under it."""

from __future__ import annotations

import hashlib
from typing import TYPE_CHECKING

import numpy as np

from ..responses import ASSUMED_SHAPE, extract_traces, measure_baseline, plan_trial_windows, rest_s
from .places import take_footprints
from .recording_step import BLOCK_FRAMES

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from ..boutons import Footprints
    from .progress import Progress
    from .recording_step import Recording
    from .settings import ResponseSettings

_MOST_SHAFT = 0.6  # of the baseline: a bouton hardly brighter than its axon is doubtful, not infinitely responsive


class TraceStore:
    """Traces by what they rest on: a changed footprint has its own pixels read again, and no other."""

    def __init__(self) -> None:
        self._traces: dict[str, NDArray[np.float64]] = {}

    def read(
        self,
        footprints: Footprints,
        recording: Recording,
        *,
        recorded: str,
        settings: ResponseSettings,
        progress: Progress,
    ) -> NDArray[np.float64]:
        """Return the brightness of each bouton without background, neighbours and the bare axon under it.

        Parameters
        ----------
        footprints : Footprints
            Which pixels count, and how much.
        recording : Recording
            Movie and movement.
        recorded : str
            What names the recording as it was looked at; traces of another one are read anew.
        settings : ResponseSettings
            How baselines are taken.
        progress : callable
            Called with (done, total).

        Returns
        -------
        (n_boutons, n_frames) ndarray
        """
        marks = [
            hashlib.sha256(f"{recorded}{y0},{x0}{weights.shape}".encode() + weights.tobytes()).hexdigest()
            for y0, x0, weights in zip(footprints.y0, footprints.x0, footprints.weights, strict=True)
        ]
        new = np.array([i for i, mark in enumerate(marks) if mark not in self._traces], dtype=np.intp)
        if new.size:
            read = extract_traces(
                recording.movie,
                footprints=take_footprints(footprints, new),
                drift=recording.drift,
                block_frames=BLOCK_FRAMES,
                progress=progress,
            )
            self._traces |= {marks[i]: trace for i, trace in zip(new, read, strict=True)}
        self._traces = {mark: self._traces[mark] for mark in marks}
        f = np.array([self._traces[mark] for mark in marks]).reshape(len(marks), recording.movie.shape[0])
        return _without_axon(f, footprints, recording, settings)


def _without_axon(
    f: NDArray[np.float64], footprints: Footprints, recording: Recording, settings: ResponseSettings
) -> NDArray[np.float64]:
    """Take the axon's light off as a constant share of the baseline: it bleaches as the bouton does."""
    rough = measure_baseline(
        f,
        timing=recording.timing,
        windows=plan_trial_windows(
            timing=recording.timing, tail_s=rest_s(ASSUMED_SHAPE), baseline_s=settings.baseline_s
        ),
        used=recording.drift.used,
        method="bleaching",
        percentile=settings.percentile,
        running_s=settings.percentile_s,
    )
    mean = rough.f0.mean(axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        share = np.where(mean > 0, footprints.shaft_counts / mean, 0.0)
    share = np.clip(np.nan_to_num(share), 0.0, _MOST_SHAFT)
    return np.asarray(f - share[:, None] * rough.f0)
