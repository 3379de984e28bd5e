"""Everything that a simulated recording is made from, with units. A recipe and a seed give one movie."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, fields
from itertools import pairwise
from typing import Any, Literal

from ..checks import check_fraction, check_not_negative, check_positive
from ..errors import InputError


@dataclass(frozen=True, slots=True, kw_only=True)
class BoutonRecipe:
    """One bouton given by hand instead of drawn.

    Attributes
    ----------
    y_px, x_px : float
        Centre at mean drift, in pixels.
    n_sites : int
        Release sites, at least 1.
    p_site : float
        Release probability of a rested site, in [0, 1].
    q_dff : float
        Mean response to one vesicle (dF/F at the peak of the response).
    f0_photons : float
        Photons a frame at rest in the peak pixel, of the bouton alone, at the start of the recording.
    """

    y_px: float
    x_px: float
    n_sites: int
    p_site: float
    q_dff: float
    f0_photons: float

    def __post_init__(self) -> None:
        _check_at_least("n_sites", self.n_sites, 1)
        check_fraction("p_site", self.p_site)
        check_positive("q_dff", self.q_dff)
        check_positive("f0_photons", self.f0_photons)


@dataclass(frozen=True, slots=True, kw_only=True)
class Recipe:
    """Settings of a simulated recording; the defaults are a small recording with a fast glutamate-type reporter.

    Attributes
    ----------
    height_px, width_px : int
        Image size. The axon runs along the longer side.
    pixel_size_um : float
        Side of a pixel, in um.
    frame_interval_s : float
        Time from one frame to the next, in s.
    exposure_s : float or None
        Time over which a pixel gathers light, at most `frame_interval_s`, in s; None is the whole interval.
    row_time_s : float
        Delay of each image row after the one above it (rolling shutter, line scanning), in s.
    trials : int
        Repeats of the protocol.
    first_s : float
        First stimulus after the start of the movie (of each file, where a trial is a file), in s.
    trial_interval_s : float
        Time from one trial to the next, in s.
    pulses : int
        Stimuli a trial.
    pulse_interval_s : float
        Time from one pulse to the next, in s.
    pulse_table_s : tuple of tuples of float or None
        Stimulus times trial by trial instead of the regular protocol, from the start of the movie (of each file, where
        a trial is a file), in s. Trials may hold different numbers of pulses.
    file_s : float or None
        Where given, each trial is a file of this length, in s, and nothing is recorded (nor bleached) between files.
        Files begin `trial_interval_s` apart.
    rise_s, decay_s : float
        Time constants of the reporter, in s.
    slow_fraction, slow_decay_s : float
        Share and time constant (s) of a second, slow decay.
    latency_s : float
        From stimulus to the earliest release, in s.
    jitter_s : float
        Mean of the exponential delay that each vesicle has on top of it, in s.
    saturation_dff : float or None
        dF/F at which a hyperbolic reporter is saturated: s becomes s / (1 + s / saturation). None is a linear reporter.
    psf_sigma_um : float
        SD of the Gaussian point spread, in um.
    bouton_radius_um : float
        Radius of the disc of light that a bouton is before the point spread, in um.
    n_boutons : int
        Boutons along the axon.
    spacing_um, spacing_sd_um : float
        Mean and SD of the distance from bouton to bouton along the axon, in um (3.7 and 0.6: Shepherd et al. 2002).
    boutons : tuple of BoutonRecipe
        Boutons given by hand; empty draws `n_boutons` of them. The axon then runs through them.
    wander_um : float
        How far the axon swings to either side, in um.
    shaft_fraction : float
        Brightness of the bare axon relative to that of a typical bouton's peak.
    photons : float
        Median over boutons of the photons a frame at rest in the peak pixel.
    photons_cv : float
        Spread (SD of the logarithm) of that brightness over boutons.
    n_sites : tuple of int
        Smallest and largest number of release sites.
    p_release : tuple of float
        Range over which the boutons' release probabilities at pulse 1 are spread evenly.
    silent_boutons : int
        How many of the boutons never release.
    dim_boutons : int
        How many of the boutons have a quarter of the light.
    q_dff : float
        Mean over boutons of the response to one vesicle (dF/F at the peak of the response).
    q_spread : float
        CV of that mean from bouton to bouton.
    q_cv : float
        CV from vesicle to vesicle at one bouton.
    q_shape : {"gamma", "normal"}
        Distribution of single vesicles; the normal one is cut off at zero.
    facilitation : float
        A pulse raises the release probability u of a site that has p at rest by facilitation x p x (1 - u), at most to
        1. With 1 it is the rule of Tsodyks & Markram (1997).
    facilitation_s : float
        Time constant with which that wears off, in s.
    recovery_s : float
        Time constant with which a site that has released gets its next vesicle, in s; 0 is at once (no depletion).
    rundown : float
        Share of the release probability that is lost, linearly, from the first trial to the last.
    spontaneous_per_s : float
        Vesicles that a releasing bouton loses without stimulus, per s.
    failed_stimuli : float
        Share of the stimuli that reach no bouton at all.
    specks_on_axon, specks_off_axon : int
        Static bright spots that look like boutons.
    saturated_specks : int
        Static spots off the axon that exceed the detector's range.
    background_photons : float
        Diffuse light, photons a pixel and frame.
    background_cv : float
        CV of the slow, smooth fluctuation of that light.
    background_um, background_s : float
        Correlation length (um) and time (s) of the fluctuation.
    bleached : float
        Share of all light lost from the first to the last lit frame (mono-exponential), in [0, 1).
    drift_walk_px : float
        SD of the random walk of the sample, px per square root of a frame.
    drift_wave_px, drift_wave_s : float
        Amplitude (px) and period (s) of a slow swing.
    drift_jumps : int
        Sudden displacements.
    drift_jump_px : float
        SD of each displacement, px.
    dark_frames : tuple of int
        Frames without light.
    flash_frames : tuple of int
        Frames flooded with stray light.
    flash_photons : float
        Stray light in those frames, photons a pixel.
    gain : float
        Counts per photoelectron.
    read_noise_e : float
        SD of the read-out noise, in electrons.
    offset_counts : float
        Counts at no light.
    electron_multiplying : bool
        Whether a multiplication register adds its own noise (excess factor 2).
    bit_depth : int
        Counts end at 2^bit_depth - 1.
    dtype : {"uint16", "uint8", "float32"}
        Type of the pixels; float32 is not rounded.
    dead_pixels : int
        Pixels that show the offset whatever the light.
    """

    height_px: int = 48
    width_px: int = 128
    pixel_size_um: float = 0.18
    frame_interval_s: float = 0.01
    exposure_s: float | None = None
    row_time_s: float = 0.0
    trials: int = 30
    first_s: float = 0.5
    trial_interval_s: float = 0.8
    pulses: int = 1
    pulse_interval_s: float = 0.05
    pulse_table_s: tuple[tuple[float, ...], ...] | None = None
    file_s: float | None = None
    rise_s: float = 0.003
    decay_s: float = 0.06
    slow_fraction: float = 0.0
    slow_decay_s: float = 1.0
    latency_s: float = 0.002
    jitter_s: float = 0.0005
    saturation_dff: float | None = None
    psf_sigma_um: float = 0.25
    bouton_radius_um: float = 0.3
    n_boutons: int = 5
    spacing_um: float = 3.7
    spacing_sd_um: float = 0.6
    boutons: tuple[BoutonRecipe, ...] = ()
    wander_um: float = 1.5
    shaft_fraction: float = 0.1
    photons: float = 10.0
    photons_cv: float = 0.25
    n_sites: tuple[int, int] = (1, 4)
    p_release: tuple[float, float] = (0.05, 0.9)
    silent_boutons: int = 0
    dim_boutons: int = 0
    q_dff: float = 0.35
    q_spread: float = 0.1
    q_cv: float = 0.3
    q_shape: Literal["gamma", "normal"] = "gamma"
    facilitation: float = 0.0
    facilitation_s: float = 0.1
    recovery_s: float = 0.0
    rundown: float = 0.0
    spontaneous_per_s: float = 0.0
    failed_stimuli: float = 0.0
    specks_on_axon: int = 0
    specks_off_axon: int = 0
    saturated_specks: int = 0
    background_photons: float = 3.0
    background_cv: float = 0.02
    background_um: float = 6.0
    background_s: float = 0.5
    bleached: float = 0.1
    drift_walk_px: float = 0.01
    drift_wave_px: float = 0.3
    drift_wave_s: float = 20.0
    drift_jumps: int = 0
    drift_jump_px: float = 2.0
    dark_frames: tuple[int, ...] = ()
    flash_frames: tuple[int, ...] = ()
    flash_photons: float = 0.0
    gain: float = 2.0
    read_noise_e: float = 1.4
    offset_counts: float = 100.0
    electron_multiplying: bool = False
    bit_depth: int = 16
    dtype: Literal["uint16", "uint8", "float32"] = "uint16"
    dead_pixels: int = 0

    def __post_init__(self) -> None:
        for name in ("height_px", "width_px"):
            _check_at_least(name, getattr(self, name), 16)
        for name in ("trials", "pulses", "bit_depth"):
            _check_at_least(name, getattr(self, name), 1)
        for field in fields(self):
            value = getattr(self, field.name)
            if isinstance(value, int | float):
                check = _CHECKS.get(field.name, check_not_negative)
                check(field.name, value)
        self._check_choices()
        self._check_times()

    def _check_choices(self) -> None:
        if self.q_shape not in ("gamma", "normal"):
            raise InputError(f"q_shape must be 'gamma' or 'normal' (given {self.q_shape!r}).")
        if self.dtype not in ("uint16", "uint8", "float32"):
            raise InputError(f"dtype must be 'uint16', 'uint8' or 'float32' (given {self.dtype!r}).")
        deepest = {"uint16": 16, "uint8": 8, "float32": 32}[self.dtype]
        if self.bit_depth > deepest:
            raise InputError(f"bit_depth must be at most {deepest} for {self.dtype} (given {self.bit_depth}).")
        if self.bleached >= 1 or self.slow_fraction >= 1 or self.rundown > 1:
            raise InputError("bleached and slow_fraction must be less than 1.")
        if not 1 <= self.n_sites[0] <= self.n_sites[1]:
            raise InputError(f"n_sites must be (smallest, largest) with 1 or more sites (given {self.n_sites}).")
        if not 0 <= self.p_release[0] <= self.p_release[1] <= 1:
            raise InputError(f"p_release must be (smallest, largest) within 0 to 1 (given {self.p_release}).")
        if self.silent_boutons > self.n_drawn or self.dim_boutons > self.n_drawn:
            raise InputError(
                f"silent_boutons and dim_boutons must not exceed the number of boutons ({self.n_drawn}); given "
                f"{self.silent_boutons} and {self.dim_boutons}."
            )

    def _check_times(self) -> None:
        if self.exposure > self.frame_interval_s * (1 + 1e-9):
            raise InputError(
                f"exposure_s must not exceed frame_interval_s = {self.frame_interval_s:g} s (given {self.exposure:g})."
            )
        if self.row_time_s * self.height_px > self.frame_interval_s * (1 + 1e-9):
            raise InputError(
                f"row_time_s x height_px must not exceed frame_interval_s = {self.frame_interval_s:g} s "
                f"(given {self.row_time_s:g} s x {self.height_px} rows)."
            )
        for number, times in enumerate(self.stimulus_table_s, start=1):
            if not times or any(late <= early for early, late in pairwise(times)) or times[0] < 0:
                raise InputError(f"Trial {number}: stimulus times must be 0 or later and increase (given {times}).")
            if self.file_s is not None and times[-1] >= self.file_s:
                raise InputError(
                    f"Trial {number}: the stimulus at {times[-1]:g} s comes after the end of its file; lengthen file_s "
                    f"(given {self.file_s:g} s)."
                )
        if self.file_s is not None and not self.frame_interval_s <= self.file_s <= self.trial_interval_s:
            raise InputError(
                f"file_s must lie between one frame and trial_interval_s = {self.trial_interval_s:g} s "
                f"(given {self.file_s:g})."
            )

    @property
    def exposure(self) -> float:
        """Exposure of a pixel, in s."""
        return self.frame_interval_s if self.exposure_s is None else self.exposure_s

    @property
    def n_drawn(self) -> int:
        """Number of boutons, given or drawn."""
        return len(self.boutons) or self.n_boutons

    @property
    def stimulus_table_s(self) -> tuple[tuple[float, ...], ...]:
        """Stimulus times trial by trial, from the start of the movie (of each file, where a trial is a file), in s."""
        if self.pulse_table_s is not None:
            return self.pulse_table_s
        between = 0.0 if self.file_s is not None else self.trial_interval_s
        return tuple(
            tuple(self.first_s + trial * between + pulse * self.pulse_interval_s for pulse in range(self.pulses))
            for trial in range(self.trials)
        )

    @property
    def file_frames(self) -> tuple[int, ...]:
        """Frames of each file."""
        table = self.stimulus_table_s
        if self.file_s is not None:
            return (round(self.file_s / self.frame_interval_s),) * len(table)
        end_s = table[-1][0] + self.trial_interval_s
        return (math.ceil(max(end_s, table[-1][-1] + self.frame_interval_s) / self.frame_interval_s - 1e-9),)

    @property
    def n_frames(self) -> int:
        """Frames of the whole recording."""
        return sum(self.file_frames)

    def as_dict(self) -> dict[str, Any]:
        """All settings as JSON-ready values."""
        values: dict[str, Any] = {field.name: getattr(self, field.name) for field in fields(self)}
        values["boutons"] = [{field.name: getattr(b, field.name) for field in fields(b)} for b in self.boutons]
        return values


def recipe_from_dict(values: dict[str, Any]) -> Recipe:
    """Build a recipe from what `Recipe.as_dict` gave, also after a way through JSON.

    Raises
    ------
    InputError
        If a key is unknown or a value is out of range.
    """
    unknown = values.keys() - {field.name for field in fields(Recipe)}
    if unknown:
        raise InputError(f"Unknown settings of a simulation: {', '.join(sorted(unknown))}.")
    given = {name: _as_tuples(value) for name, value in values.items() if name != "boutons"}
    return Recipe(**given, boutons=tuple(BoutonRecipe(**bouton) for bouton in values.get("boutons", ())))


def _as_tuples(value: Any) -> Any:
    return tuple(_as_tuples(item) for item in value) if isinstance(value, list | tuple) else value


def _check_at_least(name: str, value: int, smallest: int) -> None:
    if value != int(value) or value < smallest:
        raise InputError(f"{name} must be a whole number of {smallest} or more (given {value}).")


# Numbers must be 0 or more, and those named here more than that.
_CHECKS: dict[str, Callable[[str, float], float]] = {
    **dict.fromkeys(("slow_fraction", "rundown", "failed_stimuli", "bleached"), check_fraction),
    **dict.fromkeys(("pixel_size_um", "frame_interval_s", "trial_interval_s", "pulse_interval_s"), check_positive),
    **dict.fromkeys(("rise_s", "decay_s", "slow_decay_s", "facilitation_s"), check_positive),
    **dict.fromkeys(("exposure_s", "saturation_dff", "psf_sigma_um", "spacing_um"), check_positive),
    **dict.fromkeys(("photons", "q_dff", "background_um", "background_s", "drift_wave_s", "gain"), check_positive),
}
