"""Places found so far: refined together, and taken out of the maps so that what they hid can be seen."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .evidence import (
    MatchedMaps,
    box_half_px,
    clearly_more,
    local_variance,
    matched_filter,
    mixture_evidence,
    release_posterior,
)
from .spots import PROFILE_REACH_SIGMA, Patch, fit_spot, gaussian_patch, read_maps, separated_weights, window

if TYPE_CHECKING:
    from numpy.typing import NDArray

_WINDOW_SIGMAS = 6.0  # radius within which heights are read against a constant background
_FIT_SIGMAS = 3.5  # half width of the image a position is fitted to
_ALONE_SIGMAS = 3.0  # a neighbour beyond that, taken out trial by trial, leaves a spot its width
_SWEEPS = 3
_MOSTLY = 0.8  # of the 5 x 5 pixels around an unusable one: more than at a border


class SpotModel:
    """Releasing spots with their sub-pixel places, heights in every trial, and the maps without them.

    Parameters
    ----------
    evoked, null : (n, y, x) ndarray
        Responses (counts).
    evoked_factor, null_factor : (n,) ndarray
        SD of each map in units of the SD of one frame's pixel.
    matched : MatchedMaps
        The same through the matched filter; `matched.evoked` is changed in place.
    null_is_silent : bool
        False where the null maps hold releases.
    spot_sigma_px : float
        Gaussian sigma of a bouton's image (px); replaced by a measured one when the spots allow it.
    """

    def __init__(
        self,
        *,
        evoked: NDArray[np.float32],
        null: NDArray[np.float32],
        evoked_factor: NDArray[np.float64],
        null_factor: NDArray[np.float64],
        matched: MatchedMaps,
        null_is_silent: bool,
        spot_sigma_px: float,
    ) -> None:
        self._evoked, self._null, self._matched = evoked, null, matched
        self._evoked_factor, self._null_factor = evoked_factor, null_factor
        self._null_is_silent = null_is_silent
        self._shape = (evoked.shape[1], evoked.shape[2])
        finite = np.isfinite(matched.pixel_variance)
        self._inverse_variance = np.where(finite, 1.0 / matched.pixel_variance, 0.0)
        self._filter_sigma = spot_sigma_px
        self._taken_out: list[tuple[NDArray[np.float64], Patch]] = []
        self.spot_sigma_px = spot_sigma_px
        self.y_px: NDArray[np.float64] = np.empty(0)
        self.x_px: NDArray[np.float64] = np.empty(0)
        self.heights: NDArray[np.float64] = np.empty((0, len(evoked)))
        self.standardised: NDArray[np.float64] = np.empty((0, len(evoked)))
        self.null_standardised: NDArray[np.float64] = np.empty((0, len(null)))
        self.position_se_px: NDArray[np.float64] = np.empty(0)

    def set_places(self, y_px: NDArray[np.float64], x_px: NDArray[np.float64]) -> None:
        """Replace all places and refine them."""
        self.y_px, self.x_px = np.array(y_px, dtype=np.float64), np.array(x_px, dtype=np.float64)
        for _ in range(_SWEEPS):
            self._read()
            self._move()
        self._read()
        self._take_out()

    def evidence(self) -> NDArray[np.float64]:
        """Return the evidence of release of each spot, with what stronger neighbours explain taken out."""
        values = np.empty(len(self.y_px))
        for index in range(len(values)):
            z = self.standardised[index]
            distance = np.hypot(self.y_px - self.y_px[index], self.x_px - self.x_px[index])
            for other in np.nonzero(
                (distance > 0) & (distance < (_WINDOW_SIGMAS + PROFILE_REACH_SIGMA) * self.spot_sigma_px)
            )[0]:
                if np.mean(self.standardised[other]) > np.mean(z):
                    z = _without_copy(z[:, None], self.heights[other])[:, 0]
            values[index] = mixture_evidence(z[:, None].astype(np.float32)).item()
        return values

    def null_evidence(self) -> NDArray[np.float64]:
        """Evidence of the same readings where nothing was stimulated."""
        return mixture_evidence(self.null_standardised.T.astype(np.float32)).astype(np.float64)

    def residual_evidence(self, evidence: NDArray[np.float32], *, reach_px: float) -> NDArray[np.float32]:
        """Evidence map with the spots taken out, recomputed within `reach_px` of them."""
        updated = evidence.copy()
        z = self._matched.evoked
        for y, x in zip(self.y_px, self.x_px, strict=True):
            y0, y1, x0, x1 = window(y, x, radius_px=reach_px, shape=self._shape)
            local = z[:, y0:y1, x0:x1].reshape(len(z), -1).astype(np.float64)
            near = np.hypot(self.y_px - y, self.x_px - x) < reach_px + 2 * self.spot_sigma_px
            for heights in self.heights[near]:
                local = _without_copy(local, heights)
            updated[y0:y1, x0:x1] = mixture_evidence(local.astype(np.float32)).reshape(y1 - y0, x1 - x0)
        return updated

    def read_one_more(
        self, y_px: NDArray[np.integer], x_px: NDArray[np.integer]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Read further places, each as if it were one more spot.

        Returns
        -------
        standardised : (n, n_evoked) ndarray
            Heights in noise SD.
        per_count : (n,) ndarray
            What a spot of height 1 adds to it, in a map with noise factor 1.
        """
        profiles = self._profiles()
        standardised, per_count = np.zeros((len(y_px), len(self._evoked))), np.zeros(len(y_px))
        for index, (y, x) in enumerate(zip(y_px.astype(float), x_px.astype(float), strict=True)):
            reach = (_WINDOW_SIGMAS + PROFILE_REACH_SIGMA) * self.spot_sigma_px
            near = np.flatnonzero(np.hypot(self.y_px - y, self.x_px - x) < reach)
            own = gaussian_patch(y, x, sigma_px=self.spot_sigma_px, shape=self._shape)
            weights = separated_weights(
                y_px=[y],
                x_px=[x],
                profiles=[own, *(profiles[i] for i in near)],
                inverse_variance=self._inverse_variance,
                radius_px=_WINDOW_SIGMAS * self.spot_sigma_px,
                separate=True,
            )
            values = np.nan_to_num(weights[0].values)
            inverse = np.maximum(self._inverse_variance[weights[0].slices], 1e-30)
            variance = float(np.sum(values**2 / inverse, where=values != 0))
            if variance > 0:
                read = read_maps(self._evoked, [Patch(y0=weights[0].y0, x0=weights[0].x0, values=values)])
                per_count[index] = 1.0 / np.sqrt(variance)
                standardised[index] = read[0] / self._evoked_factor * per_count[index]
        return standardised, per_count

    def _profiles(self) -> list[Patch]:
        return [
            gaussian_patch(y, x, sigma_px=self.spot_sigma_px, shape=self._shape)
            for y, x in zip(self.y_px, self.x_px, strict=True)
        ]

    def _read(self) -> None:
        """Heights of all spots in all maps (for a noise factor of 1), neighbours separated."""
        weights = separated_weights(
            y_px=self.y_px,
            x_px=self.x_px,
            profiles=self._profiles(),
            inverse_variance=self._inverse_variance,
            radius_px=_WINDOW_SIGMAS * self.spot_sigma_px,
            separate=True,
        )
        weights = [Patch(y0=w.y0, x0=w.x0, values=np.nan_to_num(w.values)) for w in weights]
        self.heights = read_maps(self._evoked, weights) / self._evoked_factor
        null = read_maps(self._null, weights) / self._null_factor
        variance = [
            np.sum(w.values**2 / np.maximum(self._inverse_variance[w.slices], 1e-30), where=w.values != 0)
            for w in weights
        ]
        photon_sd = np.sqrt(np.asarray(variance))
        measured = local_variance(null.T, self.heights.T, null_is_silent=self._null_is_silent)
        moving = measured > clearly_more(null.shape[1]) * photon_sd**2
        sd = np.where(moving, np.sqrt(measured), photon_sd)
        sd = np.where(sd > 0, sd, np.inf)[:, None]
        self.standardised, self.null_standardised = self.heights / sd, null / sd

    def _move(self) -> None:
        """Fit each place to the mean of its own releases, the neighbours taken out."""
        profiles = self._profiles()
        fitted = np.empty((len(profiles), 4))
        strength = np.empty(len(profiles))
        for index, (y, x) in enumerate(zip(self.y_px, self.x_px, strict=True)):
            posterior, _, _ = release_posterior(self.standardised[index])
            share = posterior * np.clip(self.standardised[index], 0.0, None)
            strength[index] = np.sqrt(np.sum(share * self.standardised[index]))
            total = max(float(share.sum()), 1e-12)
            y0, y1, x0, x1 = window(y, x, radius_px=_FIT_SIGMAS * self.spot_sigma_px, shape=self._shape)
            averaging = (share / total / self._evoked_factor).astype(np.float32)
            image = np.tensordot(averaging, self._evoked[:, y0:y1, x0:x1], axes=1)
            frame = Patch(y0=y0, x0=x0, values=image.astype(np.float64))
            own = frame.values.copy()
            for other, profile in enumerate(profiles):
                if other != index:
                    own -= float(share @ self.heights[other]) / total * profile.onto(frame)
            y_new, x_new, sigma, height = fit_spot(
                own,
                inverse_variance=self._inverse_variance[y0:y1, x0:x1],
                y=y - y0,
                x=x - x0,
                sigma=self.spot_sigma_px,
                free_sigma=False,
            )
            if not self._usable(y_new + y0, x_new + x0):
                y_new, x_new = y - y0, x - x0  # nothing can be said of a place that not every frame shows
            free_sigma = self.spot_sigma_px
            if strength[index] > 20 and self._isolated(index):
                _, _, free_sigma, height = fit_spot(
                    own,
                    inverse_variance=self._inverse_variance[y0:y1, x0:x1],
                    y=y_new,
                    x=x_new,
                    sigma=sigma,
                    free_sigma=True,
                )
            fitted[index] = y_new + y0, x_new + x0, free_sigma, height
        self.y_px, self.x_px = fitted[:, 0], fitted[:, 1]
        self.position_se_px = np.sqrt(2.0) * self.spot_sigma_px / np.maximum(strength, 1e-6)
        clear = [i for i in range(len(profiles)) if strength[i] > 20 and self._isolated(i) and fitted[i, 3] > 0]
        if clear:
            measured = float(np.median(fitted[clear, 2]))
            self.spot_sigma_px = float(np.clip(measured, 0.6 * self._filter_sigma, 1.7 * self._filter_sigma))

    def _usable(self, y: float, x: float) -> bool:
        """Whether a place can be seen: its pixel is usable, or a single unusable one among others that are."""
        row, column = round(y), round(x)
        if not (0 <= row < self._shape[0] and 0 <= column < self._shape[1]):
            return False
        around = self._inverse_variance[max(row - 2, 0) : row + 3, max(column - 2, 0) : column + 3] > 0
        return bool(self._inverse_variance[row, column] > 0 or np.mean(around) >= _MOSTLY)

    def _isolated(self, index: int) -> bool:
        distance = np.hypot(self.y_px - self.y_px[index], self.x_px - self.x_px[index])
        return bool(np.sum(distance < _ALONE_SIGMAS * self.spot_sigma_px) == 1)

    def _take_out(self) -> None:
        """Subtract every spot, at its height in each trial, from the filtered maps."""
        z = self._matched.evoked
        for heights, patch in self._taken_out:
            rows, columns = patch.slices
            z[:, rows, columns] += np.multiply.outer(heights, patch.values).astype(np.float32)
        self._taken_out = []
        box = box_half_px(self._filter_sigma)
        for y, x, heights in zip(self.y_px, self.x_px, self.heights, strict=True):
            # The filter subtracts a local mean: a spot changes the map as far as half a box beyond its own reach.
            reach = PROFILE_REACH_SIGMA * self.spot_sigma_px + box + 1
            y0, y1, x0, x1 = window(y, x, radius_px=reach + box + 4 * self._filter_sigma, shape=self._shape)
            wide = (slice(y0, y1), slice(x0, x1))
            spot = gaussian_patch(y, x, sigma_px=self.spot_sigma_px, shape=self._shape)
            image = spot.onto(Patch(y0=y0, x0=x0, values=np.zeros((y1 - y0, x1 - x0))))
            filtered = matched_filter(
                image[None].astype(np.float32),
                inverse_variance=self._inverse_variance[wide],
                spot_sigma_px=self._filter_sigma,
            )[0]
            whole = Patch(y0=y0, x0=x0, values=filtered * self._matched.scale[wide])
            y0, y1, x0, x1 = window(y, x, radius_px=reach, shape=self._shape)
            patch = Patch(y0=y0, x0=x0, values=whole.onto(Patch(y0=y0, x0=x0, values=np.zeros((y1 - y0, x1 - x0)))))
            rows, columns = patch.slices
            z[:, rows, columns] -= np.multiply.outer(heights, patch.values).astype(np.float32)
            self._taken_out.append((heights.copy(), patch))


def _without_copy(z: NDArray[np.float64], heights: NDArray[np.float64]) -> NDArray[np.float64]:
    """Responses (n, pixels) less their positive regression on a neighbour's heights.

    A spot that is not quite the shape assumed leaves a copy of each of its releases beside it. A neighbour with
    releases of its own does not follow it trial by trial, and loses nothing but chance correlation.
    """
    centred = heights - heights.mean()
    power = float(centred @ centred)
    if power <= 0:
        return z
    slope = np.maximum(centred @ z / power, 0.0)
    return np.asarray(z - np.outer(heights, slope))
