"""Recordings made of arrays, for comparisons that need no movie."""

import numpy as np
import pandas as pd
import pytest

from napari_boutonrelease.analysis.column_types import empty_table
from napari_boutonrelease.analysis.columns import BOUTONS
from napari_boutonrelease.comparison import ComparedRecording


@pytest.fixture
def make_recording():
    """Return a function that makes a recording from positions and amplitudes; what is left out is plain."""

    def make(
        *,
        name="first",
        position_px=((10.0, 20.0), (30.0, 60.0)),
        amplitude=None,
        noise_sd=0.1,
        mean_image=None,
        pixel_size_um=0.2,
        pulse_interval_s=0.05,
        columns=None,
        summary=None,
    ):
        position_px = np.asarray(position_px, dtype=float).reshape(-1, 2)
        n = len(position_px)
        if amplitude is None:
            amplitude = np.zeros((n, 20, 2))
        amplitude = np.asarray(amplitude, dtype=float)
        table = empty_table(BOUTONS).reindex(range(n))
        table["bouton"] = pd.array(np.arange(1, n + 1), dtype="Int64")
        table["y_px"], table["x_px"] = position_px[:, 0], position_px[:, 1]
        table["noise_sd"], table["noise_n"] = noise_sd, 300.0
        for column, values in (columns or {}).items():
            table[column] = values
        rng = np.random.default_rng(9)
        _, trials, pulses = amplitude.shape
        return ComparedRecording(
            name=name,
            source=name,
            boutons=table,
            amplitude=amplitude,
            amplitude_sd=np.where(np.isfinite(amplitude), noise_sd, np.nan),
            null_amplitude=rng.normal(0.0, noise_sd, (n, 300)),
            stimulus_s=np.arange(trials)[:, None] + pulse_interval_s * np.arange(pulses),
            mean_image=np.zeros((48, 96)) if mean_image is None else mean_image,
            pixel_size_um=pixel_size_um,
            summary=summary or {},
        )

    return make
