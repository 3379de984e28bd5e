"""Release amplitudes in, parameters out: binomial release, intervals, failures, pulse pairs."""

from .conditions.inverse_cv2 import InverseCv2Change, inverse_cv2_change
from .conditions.joint import JointFit, fit_joint
from .conditions.joint_data import JointData
from .conditions.variance_mean import VarianceMeanFit, fit_parabola, fit_variance_mean
from .one_bouton.binomial import SitesFit, fit_binomial, fit_sites
from .one_bouton.compression import Compression, measure_compression, pool_compression
from .one_bouton.failures import (
    binomial_failures,
    binomial_moments,
    direct_vesicles,
    poisson_failures,
    variance_of_variance,
    variance_of_variance_from_kurtosis,
    vesicles_from_cv,
)
from .one_bouton.fit_inputs import ReleasePriors
from .one_bouton.likelihoods import (
    binomial_gaussian_loglikelihood,
    binomial_log_weights,
    component_logpdf,
    mixture_loglikelihood,
    null_loglikelihood,
    poisson_gaussian_loglikelihood,
    poisson_log_weights,
    poisson_m_max,
    vesicle_posterior,
)
from .one_bouton.mixture_fit import LogPrior
from .one_bouton.poisson import PoissonHistogramFit, fit_poisson_histogram
from .one_bouton.release_moments import ReleaseVariation, release_cumulants, release_variance
from .one_bouton.saturation import UndoneSaturation, saturate, undo_saturation
from .one_bouton.site_search import ReleaseModel
from .one_bouton.threshold import (
    balanced_threshold,
    detection_power,
    expected_false_calls,
    false_call_rate,
    peak_false_call_rate,
    rogan_gladen,
)
from .one_bouton.vesicle_sizes import gamma_vesicles_logpdf, gamma_vesicles_slopes
from .planning.planned_bouton import Doubts, PlannedBouton
from .planning.planned_power import change_power, paired_change_power, ppr_power, simulated_ppr_power
from .planning.planning import (
    TrialsNeeded,
    trials_for_change,
    trials_for_paired_change,
    trials_for_ppr,
    trials_for_sites,
    trials_for_width,
)
from .planning.release_information import effective_trials, expected_width
from .planning.sites_evidence import SitesEvidence, sites_evidence
from .pulses.pulse_pairs import PulsePair, ReleaseHistory, fisher_exact_p, measure_history, measure_pulse_pair
from .pulses.pulse_patterns import PulsePattern, pulse_interval_groups, pulse_patterns
from .pulses.recovery import PairedMeans, PulseIntervalFit, fit_pulse_intervals, paired_means, ratio_as_means
from .pulses.trains import PulseTrain, measure_train, pool_in_vesicles
from .pulses.tsodyks_markram import TrainModel, fit_tsodyks_markram, no_train_model, release_shares
from .statistics.differences import difference_of_estimates, ratio_of_estimates
from .statistics.false_discovery import benjamini_hochberg
from .statistics.intervals import (
    Estimate,
    clopper_pearson_interval,
    jeffreys_interval,
    mcnemar_test,
    newcombe_difference_interval,
    ratio_interval,
    wilson_interval,
    zero_success_upper_limit,
)
from .statistics.paired_change import PairedChange, measure_paired_change
from .statistics.ratios import FiellerInterval, bootstrap_ratio_interval, fieller_interval, unbiased_ratio
from .whole_axon.co_release import CoRelease, measure_co_release
from .whole_axon.detection_curve import DetectionCurve, fit_detection_curve
from .whole_axon.gradient import Gradient, measure_gradient
from .whole_axon.heterogeneity import (
    BetaBinomialFit,
    Heterogeneity,
    dispersion,
    effective_counts,
    fit_beta_binomial,
    measure_heterogeneity,
)
from .whole_axon.morans_i import MoransI, measure_morans_i
from .whole_axon.pooled import AxonRelease, fit_axon_release
from .whole_axon.release_curves import release_curves
from .whole_axon.selection import SelectionCorrection, correct_for_detection
from .whole_axon.split_half import SplitHalf, correlate_release_with_ratio
from .whole_axon.stimulus_failures import StimulusFailures, find_stimulus_failures, release_log_ratio

__all__ = [
    "AxonRelease",
    "BetaBinomialFit",
    "CoRelease",
    "Compression",
    "DetectionCurve",
    "Doubts",
    "Estimate",
    "FiellerInterval",
    "Gradient",
    "Heterogeneity",
    "InverseCv2Change",
    "JointData",
    "JointFit",
    "LogPrior",
    "MoransI",
    "PairedChange",
    "PairedMeans",
    "PlannedBouton",
    "PoissonHistogramFit",
    "PulseIntervalFit",
    "PulsePair",
    "PulsePattern",
    "PulseTrain",
    "ReleaseHistory",
    "ReleaseModel",
    "ReleasePriors",
    "ReleaseVariation",
    "SelectionCorrection",
    "SitesEvidence",
    "SitesFit",
    "SplitHalf",
    "StimulusFailures",
    "TrainModel",
    "TrialsNeeded",
    "UndoneSaturation",
    "VarianceMeanFit",
    "balanced_threshold",
    "benjamini_hochberg",
    "binomial_failures",
    "binomial_gaussian_loglikelihood",
    "binomial_log_weights",
    "binomial_moments",
    "bootstrap_ratio_interval",
    "change_power",
    "clopper_pearson_interval",
    "component_logpdf",
    "correct_for_detection",
    "correlate_release_with_ratio",
    "detection_power",
    "difference_of_estimates",
    "direct_vesicles",
    "dispersion",
    "effective_counts",
    "effective_trials",
    "expected_false_calls",
    "expected_width",
    "false_call_rate",
    "fieller_interval",
    "find_stimulus_failures",
    "fisher_exact_p",
    "fit_axon_release",
    "fit_beta_binomial",
    "fit_binomial",
    "fit_detection_curve",
    "fit_joint",
    "fit_parabola",
    "fit_poisson_histogram",
    "fit_pulse_intervals",
    "fit_sites",
    "fit_tsodyks_markram",
    "fit_variance_mean",
    "gamma_vesicles_logpdf",
    "gamma_vesicles_slopes",
    "inverse_cv2_change",
    "jeffreys_interval",
    "mcnemar_test",
    "measure_co_release",
    "measure_compression",
    "measure_gradient",
    "measure_heterogeneity",
    "measure_history",
    "measure_morans_i",
    "measure_paired_change",
    "measure_pulse_pair",
    "measure_train",
    "mixture_loglikelihood",
    "newcombe_difference_interval",
    "no_train_model",
    "null_loglikelihood",
    "paired_change_power",
    "paired_means",
    "peak_false_call_rate",
    "poisson_failures",
    "poisson_gaussian_loglikelihood",
    "poisson_log_weights",
    "poisson_m_max",
    "pool_compression",
    "pool_in_vesicles",
    "ppr_power",
    "pulse_interval_groups",
    "pulse_patterns",
    "ratio_as_means",
    "ratio_interval",
    "ratio_of_estimates",
    "release_cumulants",
    "release_curves",
    "release_log_ratio",
    "release_shares",
    "release_variance",
    "rogan_gladen",
    "saturate",
    "simulated_ppr_power",
    "sites_evidence",
    "trials_for_change",
    "trials_for_paired_change",
    "trials_for_ppr",
    "trials_for_sites",
    "trials_for_width",
    "unbiased_ratio",
    "undo_saturation",
    "variance_of_variance",
    "variance_of_variance_from_kurtosis",
    "vesicle_posterior",
    "vesicles_from_cv",
    "wilson_interval",
    "zero_success_upper_limit",
]
