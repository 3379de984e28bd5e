"""How good a recording is, in sentences that say what to do about it."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from ..analysis.summary import summarise
from ..reports.words import counted, short

if TYPE_CHECKING:
    from ..analysis.measured import Measured

_MUCH_BLEACHING = 0.3
_MANY_LEFT_OUT = 0.02
_FEW_TRIALS = 20


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """One thing about a recording.

    Attributes
    ----------
    title : str
    sentence : str
        What was found and, unless it is good, what to do.
    good : bool
    """

    title: str
    sentence: str
    good: bool


def findings(measured: Measured) -> tuple[Finding, ...]:
    """Judge what was measured of the recording's quality."""
    quality = summarise(measured)["quality"]
    trials = len(measured.timing.stimulus_s)
    return (
        _movement(measured, quality["drift_max_px"], quality["drift_noise_px"]),
        _bleaching(quality["bleaching"]),
        _saturation(quality["saturated_px"]),
        _gain(quality),
        _left_out(measured, quality["frames_left_out"]),
        *(() if not quality["dead_px"] else (_dead(quality["dead_px"]),)),
        *(() if trials >= _FEW_TRIALS else (_few(trials),)),
    )


def _movement(measured: Measured, most_px: float | None, noise_px: float | None) -> Finding:
    title = "Movement"
    if not measured.settings.recording.correct_motion:
        return Finding(title=title, sentence="not followed, as you chose.", good=True)
    if not measured.drift.corrected or most_px is None:
        sentence = "could not be followed: the image holds too little structure. Check the focus; do not trust shifts."
        return Finding(title=title, sentence=sentence, good=False)
    known = "" if noise_px is None else f", known within {short(noise_px)} px"
    limit = measured.settings.recording.max_shift_px
    if most_px > 0.9 * limit:
        sentence = f"up to {short(most_px)} px, near the limit of {short(limit)} px: raise “at most” and analyse again."
        return Finding(title=title, sentence=sentence, good=False)
    return Finding(title=title, sentence=f"up to {short(most_px)} px{known}; corrected.", good=True)


def _bleaching(share: float | None) -> Finding:
    title = "Bleaching"
    if share is None:
        return Finding(
            title=title, sentence="cannot be measured: the movie shows no light above the offset.", good=False
        )
    lost = f"{100 * max(share, 0.0):.0f} % of the light lost"
    if share > _MUCH_BLEACHING:
        return Finding(
            title=title, sentence=f"{lost}: later trials are noisier. Use less light, or fewer trials.", good=False
        )
    return Finding(title=title, sentence=f"{lost}.", good=True)


def _saturation(n_px: int) -> Finding:
    if not n_px:
        return Finding(title="Saturation", sentence="none.", good=True)
    sentence = f"{counted(n_px, 'pixel')} at the detector's ceiling: large responses are cut. Use less light or gain."
    return Finding(title="Saturation", sentence=sentence, good=False)


def _gain(quality: dict[str, float | None]) -> Finding:
    title, gain, low, high = "Gain", quality["gain"], quality["gain_lo"], quality["gain_hi"]
    if gain is None:
        sentence = "cannot be measured: the pixels are too alike. Noise is then taken from the traces alone."
        return Finding(title=title, sentence=sentence, good=True)
    limits = "" if low is None or high is None else f" ({short(low)}–{short(high)})"
    text = f"{short(gain)} counts an electron{limits}"
    noise = quality["read_noise_counts"]
    if noise is None:
        return Finding(title=title, sentence=f"{text}; give the camera offset to know the read noise.", good=True)
    return Finding(title=title, sentence=f"{text}, read noise {short(noise)} counts.", good=True)


def _left_out(measured: Measured, n_frames: int) -> Finding:
    title = "Frames left out"
    if not n_frames:
        return Finding(title=title, sentence="none.", good=True)
    light, used = measured.recording.light, measured.drift.used
    reasons = Counter(reason for reason in light.bad_reason if reason)
    lost = int(np.sum(~used & ~light.bad_frame))
    if lost:
        reasons["no match with the others"] = lost
    why = ", ".join(f"{count} {reason}" for reason, count in reasons.most_common())
    share = n_frames / len(used)
    advice = ": look at them in the movie." if share > _MANY_LEFT_OUT else "."
    return Finding(title=title, sentence=f"{n_frames} ({why}){advice}", good=share <= _MANY_LEFT_OUT)


def _dead(n_px: int) -> Finding:
    return Finding(title="Dead pixels", sentence=f"{n_px}; filled from their neighbours.", good=True)


def _few(trials: int) -> Finding:
    sentence = f"{trials}: intervals will be wide. Record {_FEW_TRIALS} or more where you can."
    return Finding(title="Trials", sentence=sentence, good=False)
