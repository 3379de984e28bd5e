"""Tables and summary of what the boutons of one axon say together."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from .axon_step import SUSPECTED
from .columns import TABLES

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

    from .pipeline import Measured


def trial_table(measured: Measured) -> pd.DataFrame:
    """Return a row a trial and pulse of the protocol."""
    import pandas as pd

    axon, failed = measured.release.axon, measured.failed
    stimulus_s = measured.timing.stimulus_s
    trial, pulse = np.nonzero(np.isfinite(stimulus_s))
    at = (trial, pulse)
    counted = np.isfinite(axon.p_released)
    released = np.where(counted, axon.p_released, 0.0).sum(axis=0)
    expected = np.where(counted, np.nan_to_num(axon.p_release)[:, None, :], 0.0).sum(axis=0)
    boutons = counted.sum(axis=0)
    reason = np.where(boutons > 0, "", "no bouton measured").astype(object)
    if failed.excluded:
        reason[failed.suspected] = SUSPECTED
    for excluded, why in measured.edits.excluded:
        if excluded <= len(reason):
            reason[excluded - 1] = why
    rows = {
        "trial": trial + 1,
        "pulse": pulse + 1,
        "stimulus_s": stimulus_s[at],
        "boutons": boutons[at],
        "released": np.where(boutons > 0, released, np.nan)[at],
        "released_expected": np.where(boutons > 0, expected, np.nan)[at],
        "stimulus_failure_p": failed.found.probability[at],
        "used": (boutons > 0).astype(np.int64)[at],
        "reason": reason[at],
    }
    return pd.DataFrame(rows).reindex(columns=list(TABLES["trials"].names))


def co_release_table(measured: Measured) -> pd.DataFrame:
    """Return a row a pair of boutons whose release can be correlated."""
    import pandas as pd

    found, places = measured.axon_statistics.co_release, measured.places
    one, other = np.nonzero(np.triu(np.isfinite(found.correlation), 1))
    rows = {
        "bouton": places.bouton[one],
        "other_bouton": places.bouton[other],
        "correlation": found.correlation[one, other],
        "p": found.p[one, other],
        "p_adjusted": found.p_adjusted[one, other],
        "together": found.together[one, other],
        "together_expected": found.together_expected[one, other],
        "distance_um": np.abs(places.axon_um[one] - places.axon_um[other]),
    }
    return pd.DataFrame(rows).reindex(columns=list(TABLES["co_release"].names))


def summarise_axon(measured: Measured) -> dict[str, Any]:
    """Put together what the boutons say together, JSON-ready; the keys are described in the data dictionary."""
    statistics, failed = measured.axon_statistics, measured.failed
    spread, moran, distance = statistics.heterogeneity, statistics.morans_i, statistics.distance
    together, found = statistics.co_release, failed.found
    pairs = np.triu(np.isfinite(together.correlation), 1)
    return {
        "heterogeneity": {
            "boutons": spread.n_boutons,
            **_numbers(sd=spread.sd.value, sd_lo=spread.sd.lo, sd_hi=spread.sd.hi),
            **_numbers(sd_maximum_likelihood=np.nan if spread.fit is None else spread.fit.sd, p=spread.p_equal),
            "method": spread.sd.method,
        },
        "morans_i": {
            "boutons": moran.n_boutons,
            **_numbers(value=moran.value, expected=moran.expected, p=moran.p),
            "weighting": moran.weighting,
            "reason": moran.reason,
        },
        "p_release_against_distance": {
            "boutons": distance.n_boutons,
            **_numbers(
                slope_per_um=distance.slope.value,
                slope_per_um_lo=distance.slope.lo,
                slope_per_um_hi=distance.slope.hi,
                at_start=distance.at_start,
                rank_correlation=distance.rank_correlation,
                p=distance.p,
            ),
            "method": distance.slope.method,
        },
        "co_release": {
            "boutons": together.n_boutons,
            "stimuli": together.n_stimuli,
            **_numbers(
                value=together.mean, independent_lo=together.mean_lo, independent_hi=together.mean_hi, p=together.mean_p
            ),
            "pairs": int(pairs.sum()),
            "pairs_together": int(np.sum(pairs & (_filled(together.p_adjusted) < 0.05))),
            "reason": together.reason,
        },
        "stimulus_failures": {
            **_numbers(trials=found.all_failed, expected=found.all_failed_expected, p=found.p_none),
            **_numbers(share=found.share.value, share_lo=found.share.lo, share_hi=found.share.hi),
            "suspected": int(failed.suspected.sum()),
            "excluded": failed.excluded,
            **_numbers(p_release=_mean(found.p_release[:, 0]) if found.p_release.shape[1] else np.nan),
            "method": found.share.method,
        },
        "split_half": _split_half(measured),
    }


def _split_half(measured: Measured) -> dict[str, Any]:
    found = measured.axon_statistics.split_half
    if found is None:
        return {"boutons": 0, "method": "none: needs a second pulse"}
    return {
        "boutons": found.n_boutons,
        **_numbers(
            value=found.corrected.value,
            lo=found.corrected.lo,
            hi=found.corrected.hi,
            p=found.corrected_p,
            plain=found.plain.value,
            plain_lo=found.plain.lo,
            plain_hi=found.plain.hi,
            plain_p=found.plain_p,
        ),
        "method": found.corrected.method,
    }


def axon_cautions(measured: Measured) -> list[str]:
    """Say what of the stimuli a reader must know."""
    failed = measured.failed
    n = int(failed.suspected.sum())
    if not n:
        return []
    stimuli = "1 stimulus seems" if n == 1 else f"{n} stimuli seem"
    if failed.excluded:
        return [f"{stimuli} to have reached no bouton and {'was' if n == 1 else 'were'} left out of every estimate."]
    low, high = 100 * failed.found.share.lo, 100 * failed.found.share.hi
    return [
        f"{stimuli} to have reached no bouton ({low:.0f} to {high:.0f} % of all): p_release is too low by that "
        "share unless they are left out (--exclude-stimulus-failures)."
    ]


def _numbers(**values: float) -> dict[str, float | None]:
    return {name: float(value) if np.isfinite(value) else None for name, value in values.items()}


def _mean(values: NDArray[np.float64]) -> float:
    known = values[np.isfinite(values)]
    return float(known.mean()) if known.size else float("nan")


def _filled(values: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.nan_to_num(values, nan=1.0)
