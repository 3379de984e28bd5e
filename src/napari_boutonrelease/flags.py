"""The one registry of flags: why to doubt a bouton's numbers, and what to do about it.

A flag never hides a bouton. Codes are what the `flags` column of the tables holds, joined by `;`.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class FlagDefinition:
    """One reason for doubt.

    Attributes
    ----------
    code : str
        What tables hold.
    meaning : str
        What was found.
    advice : str
        What a user can do about it.
    """

    code: str
    meaning: str
    advice: str


_DEFINITIONS = (
    FlagDefinition(
        "f0_unusable",
        "Baseline fluorescence is at or below background, or within its noise; dF/F is not reported.",
        "Read the amplitudes in counts, or place the bouton on a brighter pixel.",
    ),
    FlagDefinition(
        "saturated",
        "Pixels of the footprint reach the detector's ceiling; large responses are clipped.",
        "Record with less light or gain; do not trust q and n_sites of this bouton.",
    ),
    FlagDefinition(
        "dead_pixels",
        "Pixels of the footprint do not change at all and were left out.",
        "Check the camera; the bouton's noise is larger than it could be.",
    ),
    FlagDefinition(
        "edge",
        "The footprint is cut by the image border, at rest or when the sample moves.",
        "Amplitudes are scaled for what is seen; prefer boutons inside the image.",
    ),
    FlagDefinition(
        "few_trials",
        "Fewer than 20 usable trials: intervals are wide and n_sites is a guess.",
        "Record more trials.",
    ),
    FlagDefinition(
        "low_signal",
        "One vesicle is less than 2 noise_sd: single calls are unreliable.",
        "Use p_release rather than the called fraction, and more light or averaging.",
    ),
    FlagDefinition(
        "n_unresolved",
        "The data cannot tell the number of release sites apart: several n fit equally well.",
        "Quote the set n_sites_lo to n_sites_hi, or record in a second release condition.",
    ),
    FlagDefinition(
        "q_assumed",
        "No release was seen anywhere on the axon: the size of one vesicle is an assumption.",
        "The upper limit of p_release holds for responses of at least that size only.",
    ),
    FlagDefinition(
        "poor_fit",
        "The binomial model does not describe the amplitudes (goodness of fit p < 0.01).",
        "Look at the histogram: reporter saturation, rundown or two boutons in one footprint.",
    ),
    FlagDefinition(
        "compressed",
        "Responses to several vesicles are smaller than their sum (p < 0.01): the reporter seems to saturate.",
        "Set max_dff to the dF/F of the saturated reporter; until then q, n_sites and p_site are biased.",
    ),
    FlagDefinition(
        "silent",
        "No evidence of release: p_release is an upper limit.",
        "Quote p_release_hi.",
    ),
    FlagDefinition(
        "crosstalk",
        "More than a tenth of the amplitude is explained by releases of neighbours.",
        "Check the neighbour's footprint; treat correlated releases with care.",
    ),
    FlagDefinition(
        "rundown",
        "Release or amplitude changes over the trials (p < 0.01).",
        "Analyse a stable stretch of trials.",
    ),
    FlagDefinition(
        "ppr_undefined",
        "The mean first response is within noise of zero: its ratio has no finite interval.",
        "Quote p_release of both pulses instead.",
    ),
    FlagDefinition(
        "noise_from_residuals",
        "The protocol leaves no stimulus-free gap: noise_sd comes from the residuals of the fit.",
        "Leave a second without stimuli before or after each trial.",
    ),
    FlagDefinition(
        "shape_assumed",
        "The response shape could not be estimated from this recording and a stated one was used.",
        "Give the reporter's kinetics in the protocol.",
    ),
    FlagDefinition(
        "spontaneous_in_noise",
        "Releases without stimulus are frequent enough to widen the null distribution.",
        "noise_sd is robust to a few of them only; compare it with the photon limit.",
    ),
)

FLAGS: dict[str, FlagDefinition] = {definition.code: definition for definition in _DEFINITIONS}


def join_flags(codes: Iterable[str]) -> str:
    """Join flag codes for a table cell, each once, in the registry's order.

    Raises
    ------
    KeyError
        If a code is not in the registry.

    Examples
    --------
    >>> join_flags(["silent", "edge", "silent"])
    'edge;silent'
    """
    given = set(codes)
    unknown = given - FLAGS.keys()
    if unknown:
        raise KeyError(f"unknown flag codes {sorted(unknown)}")
    return ";".join(code for code in FLAGS if code in given)
