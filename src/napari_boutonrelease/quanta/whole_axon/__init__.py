"""All boutons of one axon together: pooled fit, spread, order, co-release, failed stimuli, selection."""
