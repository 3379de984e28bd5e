"""Finding boutons: by their responses, and by their shape in the mean image."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .cuts import Cuts, Maxima, allowed_false, find_maxima
from .deflation import SpotModel
from .evidence import mixture_evidence, standardise
from .false_discovery import local_maxima, measure_false_rate
from .quiet_places import QuietPlaces, choose_quiet_places, evidence_by_itself
from .shape_candidates import ShapeCandidates, find_shape_candidates

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from .maps import ResponseStack

_LEAST_SEEN = 0.8  # of the energy of a spot: one cut by the border is averaged over too few pixels to be believed
_MAX_ROUNDS = 12
_PREVIEW_SPACING = 1.5  # of the spacing: flanks of strong boutons, not taken out there, are no boutons
_CLOSEST = 0.75  # of the spacing: nearer than that two fitted places are one bouton
_SHAPE_POSITION_ERROR = 0.25  # of the spot's sigma: the shaft and unequal neighbours pull a maximum of the mean image


@dataclass(frozen=True, slots=True, kw_only=True)
class Detection:
    """Boutons found in one recording, top to bottom.

    Attributes
    ----------
    y_px, x_px : (n,) ndarray
        Centres in reference coordinates (px).
    found_by : (n,) tuple of str
        `responses`, `shape` or `both`.
    score : (n,) ndarray
        Evidence of release at the place, neighbours taken out (log-likelihood ratio, nats).
    shape_contrast : (n,) ndarray
        How far the spot stands out of the mean image (SD of its background); NaN where not found by shape.
    evidence : (y, x) ndarray
        Evidence map before any bouton was taken out (nats).
    cut : float
        Evidence above which a maximum anywhere counted as a bouton (nats); where the mean image shows a spot,
        `cut_at_shape` was enough.
    cut_at_shape : float
    expected_false : float
        False ones expected among those found by responses.
    spot_sigma_px : float
        Gaussian sigma of a bouton's image, measured where clear boutons stand alone, else as given (px).
    maxima : Maxima or None
        Maxima of the evidence, for a preview of other cuts; None where boutons were looked for by shape alone.
    quiet : QuietPlaces or None
        Places without a bouton found by its responses, to measure which boutons were missed; None as for `maxima`.
    """

    y_px: NDArray[np.float64]
    x_px: NDArray[np.float64]
    found_by: tuple[str, ...]
    score: NDArray[np.float64]
    shape_contrast: NDArray[np.float64]
    evidence: NDArray[np.float32]
    cut: float
    cut_at_shape: float
    expected_false: float
    spot_sigma_px: float
    maxima: Maxima | None
    quiet: QuietPlaces | None


def detect_boutons(
    stack: ResponseStack,
    *,
    spot_sigma_px: float,
    spacing_px: float,
    false_discovery: float,
    shape_candidates: bool,
    exclude: NDArray[np.bool_],
    rng: np.random.Generator,
    progress: Callable[[int, int], None] | None,
) -> Detection:
    """Find boutons by stimulus-locked release and by shape.

    Strong boutons are found first, fitted together trial by trial and taken out of the maps; then what they hid is
    looked for (Högbom 1974), until nothing exceeds the cut. The cut keeps the expected number of false ones, measured
    on noise maps, below 0.3 of `false_discovery` times the number found, so that most recordings stay below the whole;
    the very first one must be less likely to be false than a tenth of `false_discovery`, so that a recording without
    release stays empty. Where the mean image shows a spot, less evidence is needed than elsewhere (Genovese, Roeder &
    Wasserman 2006). A place must show more than what it does without a stimulus.

    Parameters
    ----------
    stack : ResponseStack
        Response and null maps.
    spot_sigma_px : float
        Gaussian sigma of a bouton's image (px).
    spacing_px : float
        Smallest distance of two boutons (px).
    false_discovery : float
        Expected share of false ones among those found by responses.
    shape_candidates : bool
        Also take round spots of the mean image, silent or not.
    exclude : (y, x) ndarray of bool
        Pixels without information: saturated, dead, or moved out of the image.
    rng : Generator
        Draws the noise stacks.
    progress : callable or None
        Called with (done, total).

    Returns
    -------
    Detection
    """
    advance = progress or _silently
    steps = 4
    null_is_silent = stack.null_from == "gaps"
    matched = standardise(
        evoked=stack.evoked,
        null=stack.null,
        evoked_factor=stack.evoked_factor,
        null_factor=stack.null_factor,
        mean_image=stack.mean_image,
        null_is_silent=null_is_silent,
        spot_sigma_px=spot_sigma_px,
        exclude=exclude,
    )
    advance(1, steps)
    evidence = mixture_evidence(matched.evoked)
    blind = _share_seen(exclude, spot_sigma_px=spot_sigma_px) < _LEAST_SEEN
    evidence[blind] = 0.0
    rate = measure_false_rate(matched.null, correlation=stack.evoked_correlation, spacing_px=spacing_px, rng=rng)
    advance(2, steps)
    shapes = (
        find_shape_candidates(
            stack.mean_image, spot_sigma_px=spot_sigma_px, spacing_px=_CLOSEST * spacing_px, exclude=exclude
        )
        if shape_candidates
        else ShapeCandidates(y_px=np.empty(0), x_px=np.empty(0), contrast=np.empty(0))
    )
    cuts = Cuts(rate=rate, near_shape=_near(shapes, radius_px=max(spacing_px / 2, 1.0), shape=evidence.shape))
    model = SpotModel(
        evoked=stack.evoked,
        null=stack.null,
        evoked_factor=stack.evoked_factor,
        null_factor=stack.null_factor,
        matched=matched,
        null_is_silent=null_is_silent,
        spot_sigma_px=spot_sigma_px,
    )
    score = _find_releasing(
        model,
        evidence,
        cuts=cuts,
        spacing_px=spacing_px,
        false_discovery=false_discovery,
        null_is_silent=null_is_silent,
        blind=blind,
    )
    advance(3, steps)
    allowed = allowed_false(len(score), false_discovery)
    anywhere, at_shape = cuts.at(allowed)
    detection = _merge(
        model,
        score,
        shapes,
        spacing_px=spacing_px,
        evidence=evidence,
        cut=anywhere,
        cut_at_shape=at_shape,
        expected_false=allowed if len(score) else 0.0,
        maxima=find_maxima(evidence, cuts=cuts, spacing_px=_PREVIEW_SPACING * spacing_px),
        quiet=choose_quiet_places(
            stack,
            matched,
            model=model,
            spots=_near(shapes, radius_px=0.75, shape=evidence.shape),
            blind=blind,
            spacing_px=spacing_px,
            spot_sigma_px=spot_sigma_px,
            cut=anywhere,
            cut_at_shape=at_shape,
            rng=rng,
        ),
    )
    advance(4, steps)
    return detection


def detect_by_shape(
    mean_image: NDArray[np.floating], *, spot_sigma_px: float, spacing_px: float, exclude: NDArray[np.bool_]
) -> Detection:
    """Find boutons by their shape in the mean image alone, where the responses are too few to look for any.

    Parameters
    ----------
    mean_image : (y, x) ndarray
        Mean of the movement-corrected frames (counts).
    spot_sigma_px, spacing_px, exclude
        As for `detect_boutons`.

    Returns
    -------
    Detection
        Without evidence: 0 everywhere, and NaN for the cuts and the number of false ones.
    """
    found = find_shape_candidates(
        mean_image, spot_sigma_px=spot_sigma_px, spacing_px=_CLOSEST * spacing_px, exclude=exclude
    )
    order = np.lexsort((found.x_px, found.y_px))
    nothing = float("nan")
    return Detection(
        y_px=found.y_px[order],
        x_px=found.x_px[order],
        found_by=("shape",) * len(order),
        score=np.zeros(len(order)),
        shape_contrast=found.contrast[order],
        evidence=np.zeros(mean_image.shape, dtype=np.float32),
        cut=nothing,
        cut_at_shape=nothing,
        expected_false=nothing,
        spot_sigma_px=spot_sigma_px,
        maxima=None,
        quiet=None,
    )


def _share_seen(exclude: NDArray[np.bool_], *, spot_sigma_px: float) -> NDArray[np.float64]:
    """Return the share of a spot's energy that usable pixels hold, for a spot on each pixel."""
    from scipy.ndimage import gaussian_filter

    usable = (~exclude).astype(np.float64)
    return np.asarray(gaussian_filter(usable, spot_sigma_px / np.sqrt(2.0), mode="constant"))


def _silently(done: int, total: int) -> None:
    pass


def _find_releasing(
    model: SpotModel,
    evidence: NDArray[np.float32],
    *,
    cuts: Cuts,
    spacing_px: float,
    false_discovery: float,
    null_is_silent: bool,
    blind: NDArray[np.bool_],
) -> NDArray[np.float64]:
    """Fill `model` with releasing spots; returns their evidence."""
    score = np.empty(0)
    residual: NDArray[np.floating] = evidence
    refused: list[tuple[float, float, float]] = []
    for _ in range(_MAX_ROUNDS):
        excess = residual / cuts.map(allowed_false(len(score), false_discovery))
        # Only the highest of each neighbourhood: its own flanks must be gone before the next one is believed.
        y, x = local_maxima(excess, spacing_px=3 * spacing_px, above=1.0)
        new = [
            (float(a), float(b))
            for a, b in zip(y, x, strict=True)
            if _distance(model, a, b) >= _CLOSEST * spacing_px
            and all(np.hypot(a - c, b - d) >= radius for c, d, radius in refused)
        ]
        if not new:
            break
        before = len(model.y_px)
        model.set_places(np.append(model.y_px, [a for a, _ in new]), np.append(model.x_px, [b for _, b in new]))
        by_itself = _by_itself(model) if null_is_silent else np.zeros(len(model.y_px))
        score = np.maximum(model.evidence() - by_itself, 0.0)
        expected = allowed_false(len(score), false_discovery)
        keep = _keep(model, score, cuts=cuts, expected=expected, spacing_px=spacing_px)
        # The flanks of a place that is active by itself are so, too.
        refused += [
            (*place, (2.5 if active else _CLOSEST) * spacing_px)
            for place, kept, active in zip(new, keep[before:], by_itself[before:] > 0, strict=True)
            if not kept
        ]
        if not np.all(keep):
            model.set_places(model.y_px[keep], model.x_px[keep])
            score = score[keep]
        residual = np.where(blind, 0.0, model.residual_evidence(evidence, reach_px=3 * spacing_px))
    return score


def _by_itself(model: SpotModel) -> NDArray[np.float64]:
    """Return the evidence that each place would show without any stimulus."""
    ratio = model.standardised.shape[1] / model.null_standardised.shape[1]
    return evidence_by_itself(model.null_evidence(), evoked_per_null=ratio)


def _keep(
    model: SpotModel, score: NDArray[np.float64], *, cuts: Cuts, expected: float, spacing_px: float
) -> NDArray[np.bool_]:
    """Spots that hold their evidence beside their neighbours and do not sit on a stronger one."""
    height, width = cuts.near_shape.shape
    needed = cuts.map(expected)
    rows = np.clip(np.round(model.y_px).astype(int), 0, height - 1)
    columns = np.clip(np.round(model.x_px).astype(int), 0, width - 1)
    keep: NDArray[np.bool_] = score >= needed[rows, columns]
    for index in np.argsort(-score):
        if keep[index]:
            near = np.hypot(model.y_px - model.y_px[index], model.x_px - model.x_px[index]) < _CLOSEST * spacing_px
            keep[near & (score <= score[index])] = False
            keep[index] = True
    return keep


def _distance(model: SpotModel, y: float, x: float) -> float:
    return float(np.min(np.hypot(model.y_px - y, model.x_px - x), initial=np.inf))


def _near(shapes: ShapeCandidates, *, radius_px: float, shape: tuple[int, ...]) -> NDArray[np.bool_]:
    rows, columns = np.mgrid[: shape[0], : shape[1]]
    near = np.zeros(shape, dtype=np.bool_)
    for y, x in zip(shapes.y_px, shapes.x_px, strict=True):
        near |= (rows - y) ** 2 + (columns - x) ** 2 <= radius_px**2
    return near


def _merge(
    model: SpotModel,
    score: NDArray[np.float64],
    shapes: ShapeCandidates,
    *,
    spacing_px: float,
    evidence: NDArray[np.float32],
    cut: float,
    cut_at_shape: float,
    expected_false: float,
    maxima: Maxima,
    quiet: QuietPlaces,
) -> Detection:
    """Join what was found by responses with what was found by shape, pair by pair from the closest."""
    distance = np.hypot(model.y_px[:, None] - shapes.y_px, model.x_px[:, None] - shapes.x_px)
    partner = np.full(len(score), -1)
    for flat in np.argsort(distance, axis=None):
        i, j = np.unravel_index(flat, distance.shape)
        if distance[i, j] > spacing_px / 2:
            break
        if partner[i] < 0 and j not in partner:
            partner[i] = j
    rows: list[tuple[float, float, str, float, float]] = []
    for i, j in enumerate(partner):
        y, x, contrast = float(model.y_px[i]), float(model.x_px[i]), np.nan
        if j >= 0:
            trust_shape = (_SHAPE_POSITION_ERROR * model.spot_sigma_px) ** -2.0
            trust_responses = model.position_se_px[i] ** -2.0
            y = (y * trust_responses + shapes.y_px[j] * trust_shape) / (trust_responses + trust_shape)
            x = (x * trust_responses + shapes.x_px[j] * trust_shape) / (trust_responses + trust_shape)
            contrast = float(shapes.contrast[j])
        rows.append((y, x, "both" if j >= 0 else "responses", float(score[i]), contrast))
    for j in range(len(shapes.y_px)):
        y, x = float(shapes.y_px[j]), float(shapes.x_px[j])
        if j not in partner and _distance(model, y, x) > spacing_px / 2:
            at = evidence[round(y), round(x)] if _distance(model, y, x) > 3 * spacing_px else 0.0
            rows.append((y, x, "shape", float(at), float(shapes.contrast[j])))
    rows.sort()
    y_px, x_px, found_by, scores, contrasts = zip(*rows, strict=True) if rows else ((),) * 5
    return Detection(
        y_px=np.asarray(y_px, dtype=np.float64),
        x_px=np.asarray(x_px, dtype=np.float64),
        found_by=tuple(str(value) for value in found_by),
        score=np.asarray(scores, dtype=np.float64),
        shape_contrast=np.asarray(contrasts, dtype=np.float64),
        evidence=evidence,
        cut=cut,
        cut_at_shape=cut_at_shape,
        expected_false=expected_false,
        spot_sigma_px=model.spot_sigma_px,
        maxima=maxima,
        quiet=quiet,
    )
