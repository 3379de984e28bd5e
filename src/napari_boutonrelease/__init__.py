"""From a movie of evoked transmitter release along an axon to defensible numbers, bouton by bouton."""

from __future__ import annotations

__version__ = "0.1.0"
