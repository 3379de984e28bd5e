"""The data dictionary of trains of pulses and of pulse pairs at several intervals."""

from __future__ import annotations

from .column_types import (
    DFF,
    TableDefinition,
    choice,
    column,
    count,
    number,
    probability,
    time_column,
    with_limits,
)

_BOUTON = count("bouton", "bouton id, from 1", minimum=1, required=True)
_ONE = count("bouton", "bouton id, from 1", minimum=1, required=True, unique=True)

TRAINS = TableDefinition(
    name="trains",
    meaning="a row a bouton, where trials have five or more pulses",
    key=("bouton",),
    columns=(
        _ONE,
        count("pulses", "pulses of the train"),
        number("interval_s", "s", "time from pulse to pulse, of the most frequent kind of train", minimum=0),
        count("trials", "trials of that kind in which every pulse was measured"),
        *with_limits(number("steady_ratio", "", "mean amplitude of the late pulses over that of pulse 1")),
        probability("steady_p", "p that the late responses neither rise nor fall"),
        *with_limits(
            number("pool", DFF, "releasable pool: where the line through the late cumulative amplitudes meets pulse 1")
        ),
        *with_limits(number("pool_vesicles", "", "pool over q")),
        *with_limits(number("replenished", DFF, "slope of that line: what comes back from pulse to pulse")),
        *with_limits(probability("u", "share of the resources that pulse 1 uses (Tsodyks and Markram 1997)")),
        *with_limits(number("tau_rec_s", "s", "time constant with which used resources come back", minimum=0)),
        *with_limits(number("tau_facil_s", "s", "time constant with which facilitation wears off", minimum=0)),
        *with_limits(number("resources", DFF, "amplitude were all resources of the model used at once", minimum=0)),
        probability("model_p", "p of so bad a fit of the model"),
        column("note", "string", "", "what is missing, and what to doubt"),
    ),
)

INTERVALS = TableDefinition(
    name="intervals",
    meaning="a row a bouton and pulse interval, where trials have several intervals",
    key=("bouton", "interval_s"),
    columns=(
        _BOUTON,
        time_column("interval_s", "time from pulse 1 to pulse 2"),
        count("trials", "trials with this interval in which both pulses were measured"),
        number("first_mean", DFF, "mean amplitude of pulse 1"),
        number("second_mean", DFF, "mean amplitude of pulse 2"),
        *with_limits(number("ppr", "", "paired-pulse ratio at this interval")),
    ),
)

RECOVERY = TableDefinition(
    name="recovery",
    meaning="a row a bouton, where trials have several pulse intervals: the time course of the paired-pulse ratio",
    key=("bouton",),
    columns=(
        _ONE,
        count("intervals", "different pulse intervals"),
        choice("model", "time course chosen by AICc", "constant", "facilitation", "depression", "both", "none"),
        *with_limits(number("facilitation", "", "a of the term a exp(-interval / facilitation_s)", minimum=0)),
        *with_limits(number("facilitation_s", "s", "time constant with which facilitation wears off", minimum=0)),
        *with_limits(number("depression", "", "d of the term -d exp(-interval / depression_s)", minimum=0, maximum=1)),
        *with_limits(number("depression_s", "s", "time constant with which depression recovers", minimum=0)),
        probability("constant_p", "p that the ratio is 1 at every interval"),
        probability("model_p", "p of so bad a fit of the chosen time course"),
        column("note", "string", "", "what is missing, and what to doubt"),
    ),
)

_ALL = "of all boutons together"


def _summary_limits(path: str, meaning: str) -> dict[str, str]:
    return {
        path: meaning,
        f"{path}_lo": "lower end of its 95 % interval",
        f"{path}_hi": "upper end of its 95 % interval",
    }


TRAIN_SUMMARY: dict[str, str] = {
    "train.pulses": "pulses of the train",
    "train.trials": "trials in which every pulse was measured",
    "train.late_pulses": "late pulses, on which the line through the cumulative amplitudes rests",
    "train.pulse_s": "time of each pulse after the first, s",
    "train.amplitude": f"mean amplitude of each pulse, dF/F, summed over boutons: {_ALL}",
    "train.amplitude_lo": "lower ends of their 95 % intervals, over trials",
    "train.amplitude_hi": "upper ends of their 95 % intervals, over trials",
    "train.cumulative": "the same, summed up to each pulse, dF/F",
    "train.cumulative_se": "their standard errors, over trials",
    **_summary_limits("train.steady_ratio", f"late over first amplitude {_ALL}"),
    **_summary_limits("train.pool", f"releasable pool {_ALL}, dF/F"),
    **_summary_limits("train.replenished", f"what comes back from pulse to pulse {_ALL}, dF/F"),
    **_summary_limits("train.u", f"share of the resources that pulse 1 uses, {_ALL}"),
    **_summary_limits("train.tau_rec_s", f"time constant with which they come back, {_ALL}, s"),
    **_summary_limits("train.tau_facil_s", f"time constant of facilitation {_ALL}, s"),
    **_summary_limits("train.resources", f"amplitude were all resources used at once, {_ALL}, dF/F"),
    "train.model_p": "p of so bad a fit of the model",
    "train.note": "what is missing of the train, and what to doubt",
    "pulse_intervals.interval_s": "pulse intervals of the trials, s",
    "pulse_intervals.ppr": "second over first amplitude at each interval, both summed over boutons",
    "pulse_intervals.ppr_lo": "lower ends of their 95 % intervals, over trials",
    "pulse_intervals.ppr_hi": "upper ends of their 95 % intervals, over trials",
    "pulse_intervals.model": "its time course, chosen by AICc: constant, facilitation, depression, both or none",
    **_summary_limits("pulse_intervals.facilitation", "a of the term a exp(-interval / facilitation_s)"),
    **_summary_limits("pulse_intervals.facilitation_s", "time constant with which facilitation wears off, s"),
    **_summary_limits("pulse_intervals.depression", "d of the term -d exp(-interval / depression_s)"),
    **_summary_limits("pulse_intervals.depression_s", "time constant with which depression recovers, s"),
    "pulse_intervals.constant_p": "p that the ratio is 1 at every interval",
    "pulse_intervals.model_p": "p of so bad a fit of the chosen time course",
    "pulse_intervals.note": "what is missing of the time course, and what to doubt",
}
"""Keys of the summary; `train` is there with trains only, `pulse_intervals` with several pulse intervals only."""
