"""The selected bouton as the plots show it: its part of what was measured, and what is selected in it."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from ..analysis.measured import Measured
from ..analysis.model import AnalysisModel


@dataclass(frozen=True, slots=True, kw_only=True)
class ShownBouton:
    """One bouton.

    Attributes
    ----------
    measured : Measured
        Where everything comes from.
    row, pulse : int
        Index of the bouton and the pulse in its arrays.
    trial : int or None
        Index of the selected trial.
    trace : (n_frames,) ndarray
        dF/F; brightness in counts where F0 is not usable.
    unit : str
        Of the trace.
    excluded : dict of int to str
        Trials left out by hand, from 0, also those not yet left out of what was measured; and why.
    """

    measured: Measured
    row: int
    pulse: int
    trial: int | None
    trace: NDArray[np.float64]
    unit: str
    excluded: dict[int, str] = field(default_factory=dict)

    @property
    def bouton(self) -> int:
        """Its id."""
        return int(self.measured.places.bouton[self.row])

    @property
    def n_trials(self) -> int:
        """Trials of the protocol."""
        return len(self.stimulus_s)

    @property
    def stimulus_s(self) -> NDArray[np.float64]:
        """Stimulus times (trial, pulse)."""
        return self.measured.timing.stimulus_s

    @property
    def amplitude(self) -> NDArray[np.float64]:
        """Amplitude of the selected pulse in every trial, those left out too (trial)."""
        return self.measured.responses.amplitudes.amplitude[self.row, :, self.pulse]

    @property
    def called(self) -> NDArray[np.float64]:
        """Calls of the selected pulse: 1, 0, NaN where it does not count (trial)."""
        return self.measured.counts.calls.called[self.row, :, self.pulse]

    @property
    def kept(self) -> NDArray[np.bool_]:
        """Which trials count (trial)."""
        kept = np.isfinite(self.called)
        kept[list(self.excluded)] = False
        return kept

    @property
    def suspected(self) -> NDArray[np.bool_]:
        """At which trials the selected pulse seems to have reached no bouton (trial); those left out do not count."""
        suspected = self.measured.failed.suspected[:, self.pulse].copy()
        suspected[list(self.excluded)] = False
        return suspected

    @property
    def failure_p(self) -> NDArray[np.float64]:
        """Probability that the selected pulse reached no bouton (trial)."""
        return self.measured.failed.found.probability[:, self.pulse]

    @property
    def threshold(self) -> float:
        """Amplitude above which a response is called, dF/F."""
        return float(self.measured.counts.calls.threshold[self.row])

    @property
    def noise_sd(self) -> float:
        """SD of an amplitude without release, dF/F."""
        return float(self.measured.amplitudes.noise_sd[self.row])


def shown_bouton(model: AnalysisModel) -> ShownBouton | None:
    """Return the selected bouton, None where there is none."""
    measured, row = model.measured, model.row()
    if measured is None or row is None:
        return None
    n_trials, n_pulses = measured.timing.stimulus_s.shape
    trial, pulse = model.selection.trial, model.selection.pulse
    usable = bool(measured.responses.baseline.usable[row])
    return ShownBouton(
        measured=measured,
        row=row,
        pulse=min((pulse or 1) - 1, n_pulses - 1),
        trial=trial - 1 if trial is not None and 1 <= trial <= n_trials else None,
        trace=_dff(measured, row) if usable else measured.f[row],
        unit="dF/F" if usable else "F (counts)",
        excluded={one - 1: why for one, why in model.edits.excluded if 1 <= one <= n_trials},
    )


def _dff(measured: Measured, row: int) -> NDArray[np.float64]:
    baseline = measured.responses.baseline
    alone = replace(baseline, f0=baseline.f0[[row]], usable=baseline.usable[[row]])
    return alone.dff(measured.f[[row]])[0]
