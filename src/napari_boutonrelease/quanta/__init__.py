"""Release amplitudes in, parameters out: binomial release, intervals, failures, pulse pairs."""

from .likelihoods import (
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

__all__ = [
    "binomial_gaussian_loglikelihood",
    "binomial_log_weights",
    "component_logpdf",
    "mixture_loglikelihood",
    "null_loglikelihood",
    "poisson_gaussian_loglikelihood",
    "poisson_log_weights",
    "poisson_m_max",
    "vesicle_posterior",
]
