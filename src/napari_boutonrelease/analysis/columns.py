"""The data dictionary: every table's columns with type, unit and meaning, and the keys of the summary.

This is the one home of the names. Analyses build their tables from it, reports describe the files with it.
"""

from __future__ import annotations

from ..flags import FLAGS
from .column_types import DFF, TableDefinition
from .column_types import choice as _choice
from .column_types import codes_pattern as _codes_pattern
from .column_types import column as _column
from .column_types import count as _count
from .column_types import number as _number
from .column_types import probability as _probability
from .column_types import time_column as _time
from .column_types import with_limits as _limits
from .selection_columns import DETECTION, SELECTION_SUMMARY
from .train_columns import INTERVALS, RECOVERY, TRAIN_SUMMARY, TRAINS

_BOUTON = _count("bouton", "bouton id, from 1", minimum=1, required=True)
_TRIAL = _count("trial", "trial number, from 1", minimum=1, required=True)
_PULSE = _count("pulse", "number of the pulse within its trial, from 1", minimum=1, required=True)

BOUTONS = TableDefinition(
    name="boutons",
    meaning="a row a bouton",
    key=("bouton",),
    columns=(
        _count("bouton", _BOUTON.meaning, minimum=1, required=True, unique=True),
        _number("y_px", "px", "row position in the mean image, 0 at the centre of the first pixel", required=True),
        _number("x_px", "px", "column position in the mean image, 0 at the centre of the first pixel", required=True),
        _number("y_um", "µm", "y_px in µm"),
        _number("x_um", "µm", "x_px in µm"),
        _number("axon_um", "µm", "distance along the axon path from its start", minimum=0),
        _number("axon_offset_um", "µm", "distance from the axon path", minimum=0),
        _count("footprint_px", "pixels of the footprint"),
        _choice("found_by", "how the bouton was found", "responses", "shape", "both", "hand", "file"),
        _number("f0", "counts", "baseline fluorescence above background, mean over the recording"),
        _number("noise_sd", DFF, "SD of the amplitude estimator where nothing was stimulated", minimum=0),
        _choice("noise_from", "where noise_sd was measured", "gaps", "residuals"),
        _number("snr", "", "q divided by noise_sd: one vesicle in units of the noise", minimum=0),
        _number("threshold", DFF, "amplitude above which a response is called a release"),
        _count("trials", "usable trials for pulse 1"),
        *_limits(_probability("p_called", "called fraction of pulse 1")),
        _number("false_calls_expected", "", "calls of pulse 1 expected from noise alone", minimum=0),
        *_limits(_probability("p_release", "probability that pulse 1 releases at least one vesicle")),
        _number("amplitude_mean", DFF, "mean amplitude of pulse 1, failures included"),
        _number("amplitude_se", DFF, "standard error of amplitude_mean", minimum=0),
        _number("potency", DFF, "mean amplitude of the first pulses that released"),
        _probability("p2_release", "probability that pulse 2 releases at least one vesicle"),
        *_limits(_number("ppr", "", "paired-pulse ratio: mean amplitude of pulse 2 over that of pulse 1")),
        _number("ppf", "", "paired-pulse facilitation: ppr - 1"),
        _number("ppr_release", "", "p2_release over p_release", minimum=0),
        _choice(
            "paired_pulse",
            "verdict on ppr over all boutons",
            "facilitation",
            "depression",
            "unresolved",
        ),
        _probability("p2_given_release", "called fraction of pulse 2 after a called pulse 1"),
        _probability("p2_given_failure", "called fraction of pulse 2 after a failed pulse 1"),
        _probability("history_p", "Fisher's exact p that pulse 2 does not depend on the outcome of pulse 1"),
        *_limits(_count("n_sites", "most likely number of release sites", minimum=1)),
        *_limits(_probability("p_site", "release probability of one site at pulse 1")),
        *_limits(
            _number("q", DFF, "response to one vesicle; of a silent bouton, as the axon's others have it", minimum=0)
        ),
        _choice("q_from", "whether q rests on the bouton's own amplitudes or on the axon's", "own", "axon"),
        _number("q_cv", "", "coefficient of variation of one vesicle's response", minimum=0),
        _choice("quantal_model", "release model of the fit", "binomial", "poisson", "none"),
        _probability("fit_p", "goodness-of-fit p of the release model"),
        _number("spontaneous_per_min", "1/min", "releases without stimulus a minute", minimum=0),
        _number("crosstalk", "", "share of the amplitude explained by releases of neighbours", minimum=0),
        *_limits(
            _probability("p_corrected", "called fraction freed of false calls and misses (Rogan and Gladen 1978)")
        ),
        _number("noise_photon_limit_sd", DFF, "noise_sd that photon and read noise alone would give", minimum=0),
        _number("noise_excess", "", "noise_sd over noise_photon_limit_sd", minimum=0),
        _number("noise_n", "", "independent null amplitudes that noise_sd is worth: its SE is noise_sd / √(2 noise_n)"),
        _column("n_set", "string", "", "numbers of release sites that the data cannot exclude", pattern=r"\d+(;\d+)*"),
        _number("q_own", DFF, "q of the bouton fitted alone", minimum=0),
        _probability("p_release_own", "p_release of the bouton fitted alone"),
        *_limits(_probability("p_release_shrunk", "p_release given what the axon's other boutons tell about it")),
        _column("flags", "string", "", "reasons for doubt, codes joined by ;", pattern=_codes_pattern(FLAGS)),
    ),
)

PULSES = TableDefinition(
    name="pulses",
    meaning="a row a bouton and pulse number",
    key=("bouton", "pulse"),
    columns=(
        _BOUTON,
        _PULSE,
        _count("trials", "usable trials for this pulse"),
        _count("called", "trials in which this pulse was called a release"),
        *_limits(_probability("p_called", "called fraction")),
        *_limits(_probability("p_release", "probability that this pulse releases at least one vesicle")),
        _number("amplitude_mean", DFF, "mean amplitude, failures included"),
        _number("amplitude_se", DFF, "standard error of amplitude_mean", minimum=0),
        _number("amplitude_sd", DFF, "SD of the amplitudes over the trials", minimum=0),
        _number("potency", DFF, "mean amplitude of the pulses that released"),
        _number("cumulative_mean", DFF, "mean of the amplitudes summed from pulse 1 up to this one"),
        _number("cumulative_se", DFF, "standard error of cumulative_mean", minimum=0),
    ),
)

RESPONSES = TableDefinition(
    name="responses",
    meaning="a row a bouton, trial and pulse",
    key=("bouton", "trial", "pulse"),
    columns=(
        _BOUTON,
        _TRIAL,
        _PULSE,
        _time("stimulus_s", "time of the stimulus on the recording's clock"),
        _number("amplitude", DFF, "fitted height of the response"),
        _number("amplitude_se", DFF, "standard error of the amplitude", minimum=0),
        _choice("called", "1 where the amplitude exceeds the threshold, else 0", 0, 1),
        _probability("p_released", "posterior probability that the pulse released"),
        _choice("used", "1 where the response counts in every estimate, else 0", 0, 1),
        _column("reason", "string", "", "why the response was left out"),
    ),
)

SPONTANEOUS = TableDefinition(
    name="spontaneous",
    meaning="a row a spontaneous release",
    key=(),
    columns=(
        _BOUTON,
        _time("time_s", "time of the release on the recording's clock"),
        _number("amplitude", DFF, "fitted height"),
        _number("amplitude_se", DFF, "standard error of the amplitude", minimum=0),
        _number("score", "", "amplitude over its standard error under noise alone"),
    ),
)

DRIFT = TableDefinition(
    name="drift",
    meaning="a row a frame",
    key=("frame",),
    columns=(
        _count("frame", "frame number, from 0", required=True, unique=True),
        _time("time_s", "start of the frame on the recording's clock"),
        _number("dy_px", "px", "movement in y: a thing at y in the reference lies at y + dy in this frame"),
        _number("dx_px", "px", "movement in x: a thing at x in the reference lies at x + dx in this frame"),
        _number("match", "", "agreement with the reference, 1 is perfect"),
        _choice("used", "1 where the frame counts in every fit, else 0", 0, 1),
    ),
)

TRIALS = TableDefinition(
    name="trials",
    meaning="a row a trial and pulse",
    key=("trial", "pulse"),
    columns=(
        _TRIAL,
        _PULSE,
        _time("stimulus_s", "time of the stimulus on the recording's clock"),
        _count("boutons", "boutons that were measured"),
        _number("released", "", "expected number of boutons that released, sum of p_released", minimum=0),
        _number("released_expected", "", "sum over the same boutons of their p_release", minimum=0),
        _probability("stimulus_failure_p", "posterior probability that the stimulus reached no bouton"),
        _choice("used", "1 where the stimulus counts in every estimate, else 0", 0, 1),
        _column("reason", "string", "", "why the stimulus was left out"),
    ),
)

CO_RELEASE = TableDefinition(
    name="co_release",
    meaning="a row a pair of boutons",
    key=("bouton", "other_bouton"),
    columns=(
        _BOUTON,
        _count("other_bouton", "id of the other bouton", minimum=1, required=True),
        _number(
            "correlation", "", "correlation of release over stimuli, slow changes taken out", minimum=-1, maximum=1
        ),
        _probability("p", "two-sided permutation p that the two release independently"),
        _probability("p_adjusted", "p adjusted for the number of pairs (Benjamini and Hochberg 1995)"),
        _number("together", "", "expected number of stimuli at which both released", minimum=0),
        _number("together_expected", "", "the same if the two released independently", minimum=0),
        _number("distance_um", "µm", "distance between the two along the axon path", minimum=0),
    ),
)

TABLES: dict[str, TableDefinition] = {
    table.name: table
    for table in (
        BOUTONS,
        PULSES,
        RESPONSES,
        SPONTANEOUS,
        DRIFT,
        TRIALS,
        CO_RELEASE,
        DETECTION,
        TRAINS,
        INTERVALS,
        RECOVERY,
    )
}

SUMMARY: dict[str, str] = {
    "recording.frames": "frames of the movie",
    "recording.height_px": "rows of a frame, px",
    "recording.width_px": "columns of a frame, px",
    "recording.duration_s": "length of the recording, s",
    "recording.frame_interval_s": "time from one frame to the next, s",
    "recording.exposure_s": "exposure of a frame, s",
    "recording.row_time_s": "time from one row to the next, s",
    "recording.pixel_size_um": "side of a pixel, µm",
    "recording.trials": "trials of the protocol",
    "recording.pulses": "pulses of a trial",
    "recording.pulse_interval_s": "time from pulse 1 to pulse 2, s",
    "recording.found_in": "where each time and the pixel size were read, by name",
    "counts.boutons": "boutons of the table",
    "counts.responses": "of those, found by their responses alone",
    "counts.shape": "found by their shape alone",
    "counts.both": "found by responses and shape",
    "counts.file": "given by a file",
    "counts.hand": "set by hand",
    "counts.expected_false_by_responses": "false ones expected among those found by their responses",
    "response_shape.from": "where the time course comes from: protocol, recording or assumed",
    "response_shape.latency_s": "time from stimulus to the start of the response, s",
    "response_shape.rise_s": "time constant of the rise, s",
    "response_shape.decay_s": "time constant of the decay, s",
    "response_shape.slow_fraction": "share of a second, slow decay",
    "response_shape.slow_decay_s": "its time constant, s; null without one",
    "population.boutons": "boutons that the population's mean rests on",
    "population.selection": "how those boutons were chosen, in words",
    "population.p_release": "mean p_release of those boutons, silent ones included",
    "population.p_release_lo": "lower end of its 95 % interval, over boutons",
    "population.p_release_hi": "upper end of its 95 % interval, over boutons",
    "population.boutons_found_by_responses": "of those boutons, found by their responses",
    "population.p_release_found_by_responses": "mean p_release of these; selection raises it",
    "population.p_release_found_by_responses_lo": "lower end of its 95 % interval, over boutons",
    "population.p_release_found_by_responses_hi": "upper end of its 95 % interval, over boutons",
    "population.q": "median response to one vesicle among the axon's boutons, dF/F",
    "population.q_lo": "lower end of its 95 % interval",
    "population.q_hi": "upper end of its 95 % interval",
    "population.q_spread": "SD between boutons of the logarithm of q",
    "population.q_cv": "coefficient of variation of one vesicle's response, common to the axon",
    "population.q_cv_lo": "lower end of its 95 % interval",
    "population.q_cv_hi": "upper end of its 95 % interval",
    "population.ppr": "second over first amplitude, both summed over boutons",
    "population.ppr_lo": "lower end of its 95 % interval, over trials",
    "population.ppr_hi": "upper end of its 95 % interval, over trials",
    "population.boutons_with_ppr": "boutons with a paired-pulse ratio of their own",
    **SELECTION_SUMMARY,
    "heterogeneity.boutons": "boutons that were compared",
    "heterogeneity.sd": "true SD of p_release between boutons, sampling taken out",
    "heterogeneity.sd_lo": "lower end of its 95 % interval",
    "heterogeneity.sd_hi": "upper end of its 95 % interval",
    "heterogeneity.sd_maximum_likelihood": "SD by maximum likelihood, which is too small for few boutons",
    "heterogeneity.p": "p that all boutons share one p_release",
    "heterogeneity.method": "how the SD was found, or why there is none",
    "morans_i.boutons": "boutons on the path",
    "morans_i.value": "Moran's I of p_release along the axon",
    "morans_i.expected": "its mean if the order is random",
    "morans_i.p": "its two-sided permutation p",
    "morans_i.weighting": "weight of neighbours: binary, or row (those of each bouton share a weight of 1)",
    "morans_i.reason": "why there is none; empty where there is",
    "p_release_against_distance.boutons": "boutons on the path",
    "p_release_against_distance.slope_per_um": "change of p_release along the axon, 1/µm",
    "p_release_against_distance.slope_per_um_lo": "lower end of its 95 % interval",
    "p_release_against_distance.slope_per_um_hi": "upper end of its 95 % interval",
    "p_release_against_distance.at_start": "p_release of that line at the start of the path",
    "p_release_against_distance.rank_correlation": "Spearman's correlation of p_release with distance",
    "p_release_against_distance.p": "its two-sided permutation p",
    "p_release_against_distance.method": "how the line was found, or why there is none",
    "co_release.boutons": "boutons that release at some stimuli and fail at others",
    "co_release.stimuli": "stimuli that were compared, suspected failures left out",
    "co_release.value": "mean pairwise correlation of release between boutons, slow changes taken out",
    "co_release.independent_lo": "lower end of the central 95 % of that mean among independent boutons",
    "co_release.independent_hi": "upper end of it",
    "co_release.p": "p that boutons release independently of each other",
    "co_release.pairs": "pairs of boutons that were compared",
    "co_release.pairs_together": "of those, pairs that do not release independently (adjusted p below 0.05)",
    "co_release.reason": "why there is no correlation; empty where there is",
    "stimulus_failures.trials": "expected number of stimuli at which every bouton failed",
    "stimulus_failures.expected": "such stimuli if all had arrived and boutons are independent",
    "stimulus_failures.p": "p that every stimulus arrived",
    "stimulus_failures.share": "share of the stimuli that reached no bouton",
    "stimulus_failures.share_lo": "lower end of its 95 % interval",
    "stimulus_failures.share_hi": "upper end of its 95 % interval",
    "stimulus_failures.suspected": "stimuli that are suspected to have reached no bouton",
    "stimulus_failures.excluded": "whether these are left out of every estimate",
    "stimulus_failures.p_release": "mean over releasing boutons of p_release at stimuli that arrived, pulse 1",
    "stimulus_failures.method": "how the share was found, or why there is none",
    "split_half.boutons": "boutons with a paired-pulse ratio in both halves of the trials",
    "split_half.value": "rank correlation over boutons of p_release with ppr, odd trials against even ones",
    "split_half.lo": "lower end of its 95 % interval",
    "split_half.hi": "upper end of its 95 % interval",
    "split_half.p": "its two-sided permutation p",
    "split_half.plain": "the same from all trials at once; shared noise makes it too negative",
    "split_half.plain_lo": "lower end of its 95 % interval",
    "split_half.plain_hi": "upper end of its 95 % interval",
    "split_half.plain_p": "its two-sided permutation p",
    "split_half.method": "how it was found, or why there is none",
    "quality.gain": "counts per electron",
    "quality.gain_lo": "lower end of its 95 % interval",
    "quality.gain_hi": "upper end of its 95 % interval",
    "quality.read_noise_counts": "read noise, counts",
    "quality.bleaching": "share of the light lost from first to last frame",
    "quality.drift_max_px": "largest movement, px",
    "quality.drift_noise_px": "standard error of one frame's movement along one direction, px",
    "quality.frames_left_out": "frames left out of every fit",
    "quality.saturated_px": "pixels that reach the detector's ceiling",
    "quality.dead_px": "pixels that do not change at all",
    **TRAIN_SUMMARY,
}
"""Keys of the summary that reports put into words, as dotted paths; each may be missing or null."""
