"""What a plan is to reach where nothing else is asked for; loads nothing, as the command line's help shows it."""

USUAL_GOALS = {"width": 0.2, "ppr": 1.5, "change": 0.2, "change_sd": 0.1, "power": 0.8}
"""Goals by their names in `Goals`; sites are each bouton's own."""

USUAL_SIMULATIONS = 1000
"""Simulated recordings that check an answer on pulse pairs."""
