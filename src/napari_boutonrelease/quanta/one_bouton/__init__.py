"""Release of one bouton from its own amplitudes: likelihoods, binomial and Poisson fits, failures, thresholds."""
