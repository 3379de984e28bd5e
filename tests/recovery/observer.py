"""An ideal observer: the same likelihood on amplitudes read with the true footprints, light, kinetics and drift.

What it cannot know is what nobody can know: the baseline of each trial and, frame by frame, the local background and
the brightness of the neighbours. Its errors are the yardstick for those of the analysis.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from napari_boutonrelease.recording import resolve_timing
from napari_boutonrelease.response_shape import ResponseShape
from napari_boutonrelease.responses import fit_amplitudes, plan_trial_windows, rest_s
from napari_boutonrelease.responses.dff import Baseline
from napari_boutonrelease.simulation.movie import photon_blocks
from napari_boutonrelease.simulation.plan import spot_of

BACKGROUND_RADIUS_PX = 14
_NODES = 120


@dataclass(frozen=True, slots=True, kw_only=True)
class Observed:
    """What the observer measures of the spots of a simulated recording.

    Attributes
    ----------
    spots : (n,) ndarray of int
        Indices of the boutons in the truth.
    fit : AmplitudeFit
        Their amplitudes.
    limit_sd : (n, n_pulses) ndarray
        Smallest SD of an amplitude without release that the likelihood allows (Cramér-Rao), dF/F.
    """

    spots: np.ndarray
    fit: object
    limit_sd: np.ndarray


def true_shape(recipe) -> ResponseShape:
    """The reporter's time course, its mean delay taken as latency."""
    return ResponseShape(
        latency_s=recipe.latency_s + recipe.jitter_s,
        rise_s=recipe.rise_s,
        decay_s=recipe.decay_s,
        slow_fraction=recipe.slow_fraction,
        slow_decay_s=recipe.slow_decay_s,
    )


def observe(simulation, movie) -> Observed:
    """Measure all boutons of a simulation as well as anyone could."""
    truth = simulation.truth
    recipe = truth.recipe
    timing = resolve_timing(movie, simulation.protocol)
    spots = np.asarray(truth.boutons)
    brightness, variance = _read(simulation, spots)
    f0 = recipe.gain * truth.f0_photons[spots, None] * np.where(truth.light > 0, truth.light, 1.0)
    used = truth.light > 0
    used[[frame for frame in recipe.flash_frames if frame < used.size]] = False
    shape = true_shape(recipe)
    baseline = Baseline(
        f0=f0, f0_se=np.zeros(spots.size), usable=np.ones(spots.size, dtype=bool), curve=("constant",) * spots.size
    )
    fit = fit_amplitudes(
        np.where(used, brightness, np.nan),
        baseline=baseline,
        timing=timing,
        y_px=truth.y_px[spots],
        shape=shape,
        used=used,
        baseline_s=None,
        slope=False,
    )
    limit = _limit(variance / f0**2, timing=timing, shape=shape, used=used, y_px=truth.y_px[spots])
    return Observed(spots=spots, fit=fit, limit_sd=limit)


def _read(simulation, spots):
    """Brightness of each bouton above its surroundings (counts) and its variance at rest, (n, n_frames) each."""
    truth = simulation.truth
    recipe = truth.recipe
    spot = spot_of(recipe)
    nothing = np.zeros(0, dtype=np.int64)
    at_rest = replace(
        truth,
        recipe=replace(recipe, background_cv=0.0),
        vesicle_spot=nothing,
        vesicle_trial=nothing,
        vesicle_pulse=nothing,
        vesicle_s=np.zeros(0),
        vesicle_dff=np.zeros(0),
    )
    rounding = 0.0 if recipe.dtype == "float32" else 1.0 / 12.0
    excess = 2.0 if recipe.electron_multiplying else 1.0
    brightness = np.empty((spots.size, recipe.n_frames))
    variance = np.empty_like(brightness)
    n_y, n_x = recipe.height_px, recipe.width_px
    start = 0
    for photons in photon_blocks(at_rest, rng=np.random.default_rng(0)):
        stop = start + len(photons)
        counts = simulation.frames[start:stop].astype(np.float64) - recipe.offset_counts
        moved = counts - recipe.gain * photons
        noise = recipe.gain**2 * (excess * photons + recipe.read_noise_e**2) + rounding
        dy, dx = truth.dy_px[start:stop], truth.dx_px[start:stop]
        for i, index in enumerate(spots):
            cy, cx = round(float(truth.y_px[index])), round(float(truth.x_px[index]))
            rows = slice(max(cy - BACKGROUND_RADIUS_PX, 0), min(cy + BACKGROUND_RADIUS_PX + 1, n_y))
            columns = slice(max(cx - BACKGROUND_RADIUS_PX, 0), min(cx + BACKGROUND_RADIUS_PX + 1, n_x))
            near = np.flatnonzero(
                np.hypot(truth.y_px - truth.y_px[index], truth.x_px - truth.x_px[index])
                < BACKGROUND_RADIUS_PX + 0.5 * spot.width_px
            )
            near = np.concatenate([[index], near[near != index]])
            shape = (rows.stop - rows.start, columns.stop - columns.start)
            design = np.ones((stop - start, near.size + 1, *shape))
            for k, other in enumerate(near):
                y0, x0, patch = spot.patches(truth.y_px[other] + dy, truth.x_px[other] + dx)
                design[:, k] = _placed(y0 - rows.start, x0 - columns.start, patch, shape)
            design = design.reshape(*design.shape[:2], -1)
            weight = 1.0 / noise[:, rows, columns].reshape(stop - start, 1, -1)
            seen = np.abs(design[:, :-1]).sum(axis=(0, 2)) > 0.5
            design = design[:, np.concatenate([seen, [True]])]
            weighted = design * weight
            information = weighted @ design.transpose(0, 2, 1)
            score = weighted @ moved[:, rows, columns].reshape(stop - start, -1, 1)
            inverse = np.linalg.inv(information)
            response = (inverse @ score)[:, 0, 0]
            light = truth.light[start:stop]
            brightness[i, start:stop] = response + recipe.gain * truth.f0_photons[index] * light
            variance[i, start:stop] = inverse[:, 0, 0]
        start = stop
    return brightness, variance


def _placed(y0, x0, patches, shape):
    """Patches cut to a window, (n_frames, *shape)."""
    n, height, width = patches.shape
    pad = max(height, width)
    canvas = np.zeros((n, shape[0] + 2 * pad, shape[1] + 2 * pad))
    inside = (y0 > -pad) & (x0 > -pad) & (y0 + height < shape[0] + pad) & (x0 + width < shape[1] + pad)
    at = np.flatnonzero(inside)
    rows = (y0[at] + pad)[:, None, None] + np.arange(height)[:, None]
    columns = (x0[at] + pad)[:, None, None] + np.arange(width)
    canvas[at[:, None, None], rows, columns] = patches[at]
    return canvas[:, pad:-pad, pad:-pad]


def _limit(relative_variance, *, timing, shape, used, y_px):
    """Cramér-Rao SD of each pulse's amplitude, root mean square over trials: offset of the trial unknown."""
    windows = plan_trial_windows(timing=timing, tail_s=rest_s(shape), baseline_s=None)
    n_trials, n_pulses = timing.stimulus_s.shape
    total = np.full((len(y_px), n_trials, n_pulses), np.nan)
    for b, y in enumerate(y_px):
        for trial, (low, high) in enumerate(zip(windows.start, windows.stop, strict=True)):
            frames = low + np.flatnonzero(used[low:high])
            known = np.isfinite(timing.stimulus_s[trial])
            if frames.size < 3 or not known.any():
                continue
            start_s = timing.frame_start_s[frames] + timing.row_time_s * y
            columns = [
                shape.frame_average(start_s - time, exposure_s=timing.exposure_s)
                for time in timing.stimulus_s[trial, known]
            ]
            design = np.column_stack([*columns, np.ones(frames.size)])
            information = design.T @ (design / relative_variance[b, frames][:, None])
            if np.linalg.matrix_rank(information) == design.shape[1]:
                total[b, trial, known] = np.diag(np.linalg.inv(information))[:-1]
    count = np.isfinite(total).sum(axis=1)
    return np.sqrt(np.nansum(total, axis=1) / np.where(count > 0, count, np.nan))


def density_of_vesicles(amplitude, sd, *, n_max, q, q_cv):
    """Density of each amplitude given 0..n_max vesicles of gamma-distributed size, (n_max + 1, n)."""
    from scipy.special import gammaincinv

    a, sd = np.asarray(amplitude, dtype=np.float64), np.asarray(sd, dtype=np.float64)
    result = np.empty((n_max + 1, a.size))
    middles = (np.arange(_NODES) + 0.5) / _NODES
    for m in range(n_max + 1):
        sizes = np.zeros(1)
        if m:
            sizes = gammaincinv(m / q_cv**2, middles) * q * q_cv**2 if q_cv > 0 else np.full(1, m * q)
        z = (a[None, :] - sizes[:, None]) / sd
        result[m] = np.mean(np.exp(-0.5 * z**2), axis=0) / sd
    return result


def p_release_if_all_else_known(amplitude, sd, *, n_sites, q, q_cv):
    """Maximum-likelihood release probability of one bouton and pulse where n, q, q_cv and the noise are known."""
    from scipy.stats import binom

    known = np.isfinite(amplitude)
    density = density_of_vesicles(amplitude[known], sd[known], n_max=n_sites, q=q, q_cv=q_cv)
    p_release = np.concatenate([[0.0], np.linspace(0.0005, 0.9995, 1000), [1.0]])
    p_site = 1.0 - (1.0 - p_release) ** (1.0 / n_sites)
    weight = binom.pmf(np.arange(n_sites + 1)[None, :], n_sites, p_site[:, None])
    likelihood = np.log(np.maximum(weight @ density, 1e-300)).sum(axis=1)
    return float(p_release[np.argmax(likelihood)])


def released_if_all_known(amplitude, sd, *, n_sites, p_site, q, q_cv):
    """Posterior probability that each amplitude holds a vesicle where everything about the bouton is known."""
    from scipy.stats import binom

    known = np.isfinite(amplitude)
    density = density_of_vesicles(amplitude[known], sd[known], n_max=n_sites, q=q, q_cv=q_cv)
    weight = binom.pmf(np.arange(n_sites + 1), n_sites, p_site)[:, None] * density
    posterior = np.full(amplitude.shape, np.nan)
    posterior[known] = 1.0 - weight[0] / np.maximum(weight.sum(axis=0), 1e-300)
    return posterior
