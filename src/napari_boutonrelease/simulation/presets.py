"""Recordings by name: small enough to simulate and analyse in well under a minute, close to what people record."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

from ..errors import InputError
from .recipe import Recipe


@dataclass(frozen=True, slots=True, kw_only=True)
class Preset:
    """A named recipe.

    Attributes
    ----------
    about : str
        One line for a list of presets.
    recipe : Recipe
        The settings.
    """

    about: str
    recipe: Recipe


# Glutamate reporter, 100 frames/s, a pair of pulses 50 ms apart; one vesicle is 4 to 5 times the noise of an amplitude.
_FAST_PAIR = Recipe(
    height_px=56,
    width_px=184,
    trials=60,
    trial_interval_s=0.8,
    pulses=2,
    n_boutons=8,
    specks_on_axon=1,
    specks_off_axon=2,
    photons=8.0,
    q_dff=0.4,
    facilitation=1.0,
    facilitation_s=0.1,
    recovery_s=0.06,
    spontaneous_per_s=0.02,
)

# pH-type reporter, 10 frames/s: vesicles stay bright for seconds.
_SLOW_SINGLE = Recipe(
    height_px=48,
    width_px=144,
    frame_interval_s=0.1,
    trials=30,
    first_s=3.0,
    trial_interval_s=20.0,
    n_boutons=6,
    specks_off_axon=1,
    rise_s=0.02,
    decay_s=6.0,
    photons=40.0,
    q_dff=0.08,
    background_photons=12.0,
    background_s=2.0,
    bleached=0.15,
    drift_walk_px=0.01,
    drift_wave_s=120.0,
    spontaneous_per_s=0.001,
)

PRESETS: dict[str, Preset] = {
    "fast-pair": Preset(
        about="glutamate-type reporter at 100 frames/s, 60 pairs of pulses 50 ms apart, 8 boutons", recipe=_FAST_PAIR
    ),
    "fast-single": Preset(
        about="the same axon type with 60 single pulses", recipe=replace(_FAST_PAIR, pulses=1, trial_interval_s=0.7)
    ),
    "fast-train": Preset(
        about="the same with 30 trains of 10 pulses at 20 per second: facilitation, then depletion",
        recipe=replace(_FAST_PAIR, trials=30, trial_interval_s=1.4, pulses=10, recovery_s=0.15, p_release=(0.2, 0.9)),
    ),
    "slow-single": Preset(
        about="pH-type reporter at 10 frames/s, 30 single pulses 20 s apart, 6 boutons", recipe=_SLOW_SINGLE
    ),
    "crowded": Preset(
        about="10 boutons about 1 um apart whose images overlap",
        recipe=replace(
            _FAST_PAIR,
            pulses=1,
            trial_interval_s=0.7,
            width_px=96,
            n_boutons=10,
            spacing_um=1.0,
            spacing_sd_um=0.08,
            specks_on_axon=0,
        ),
    ),
    "silent": Preset(
        about="an axon that never releases, neither evoked nor spontaneously",
        recipe=replace(_FAST_PAIR, silent_boutons=8),
    ),
    "dim": Preset(
        about="so little light that one vesicle is about twice the noise",
        recipe=replace(_FAST_PAIR, photons=2.4, background_photons=1.5),
    ),
    "file-per-trial": Preset(
        about="20 trials of paired pulses, one short file each, 5 s apart",
        recipe=replace(_FAST_PAIR, trials=20, trial_interval_s=5.0, first_s=0.4, file_s=0.9),
    ),
    "rolling": Preset(
        about="rows read one after the other (0.15 ms a row) and an exposure shorter than the frame interval",
        recipe=replace(_FAST_PAIR, pulses=1, trial_interval_s=0.7, trials=40, row_time_s=0.00015, exposure_s=0.008),
    ),
}


def preset_recipe(name: str, **changes: Any) -> Recipe:
    """Return the recipe of a preset, with settings changed by name.

    Raises
    ------
    InputError
        If there is no such preset or setting.

    Examples
    --------
    >>> preset_recipe("fast-pair", trials=10).trials
    10
    """
    if name not in PRESETS:
        raise InputError(f"There is no preset {name!r}; choose one of {', '.join(PRESETS)}.")
    try:
        return replace(PRESETS[name].recipe, **changes)
    except TypeError as error:
        raise InputError(f"A simulation has no such setting: {error}.") from error
