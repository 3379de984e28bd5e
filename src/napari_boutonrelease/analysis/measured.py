"""What an analysis found, before it is put into tables."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from pathlib import Path

    import numpy as np
    from numpy.typing import NDArray

    from ..recording import Drift, Protocol, Timing
    from ..responses import AmplitudeFit, Responses, SpontaneousReleases
    from .axon_step import AxonStatistics, FailedStimuli
    from .hand_edits import HandEdits
    from .places import Places
    from .quantal_step import Counts, ReleaseFits
    from .recording_step import Recording
    from .settings import Settings


@dataclass(frozen=True, slots=True, kw_only=True)
class Traced:
    """An analysis as far as the traces: what an edit by hand changes at once.

    Attributes
    ----------
    settings, edits
        What was asked for.
    recording : Recording
        Movie, timing, light and movement.
    places : Places
        Boutons and their footprints.
    f : (n_boutons, n_frames) ndarray
        Brightness of each bouton, background, neighbours and bare axon taken off (counts).
    axon : path or (k, 2) ndarray or None
        The axon's course as it was given.
    """

    settings: Settings
    edits: HandEdits
    recording: Recording
    places: Places
    f: NDArray[np.float64]
    axon: str | Path | NDArray[np.float64] | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Measured:
    """Everything that the steps of one analysis found, before it is put into tables.

    Attributes
    ----------
    protocol, settings, edits
        What was asked for.
    recording : Recording
        Movie, timing, light and movement.
    places : Places
        Boutons and their footprints.
    f : (n_boutons, n_frames) ndarray
        Brightness of each bouton, background, neighbours and bare axon taken off (counts).
        The reporter's saturation is undone where settings give it.
    above_ceiling : (n_boutons,) ndarray of int
        Frames in which the reporter's ceiling is reached, where settings give one: left out.
    responses : Responses
        Baseline, response shape and amplitudes of all trials.
    amplitudes : AmplitudeFit
        Those amplitudes that count: excluded trials and stimuli are NaN.
    spontaneous : SpontaneousReleases
        Releases without stimulus.
    release : ReleaseFits
        Release and quanta.
    failed : FailedStimuli
        Stimuli that seem to have reached no bouton.
    axon_statistics : AxonStatistics
        What the boutons say together.
    counts : Counts
        Calls.
    axon : path or (k, 2) ndarray or None
        The axon's course as it was given.
    """

    protocol: Protocol
    settings: Settings
    edits: HandEdits
    recording: Recording
    places: Places
    f: NDArray[np.float64]
    above_ceiling: NDArray[np.int64]
    responses: Responses
    amplitudes: AmplitudeFit
    spontaneous: SpontaneousReleases
    release: ReleaseFits
    failed: FailedStimuli
    axon_statistics: AxonStatistics
    counts: Counts
    axon: str | Path | NDArray[np.float64] | None

    @property
    def timing(self) -> Timing:
        """Frames and stimuli."""
        return self.recording.timing

    @property
    def drift(self) -> Drift:
        """Movement of every frame."""
        return self.recording.drift
