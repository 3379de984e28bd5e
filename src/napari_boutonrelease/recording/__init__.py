"""Pixels over time and when the axon was stimulated: movies, protocols, timing, movement, light."""

from __future__ import annotations

from .movie import Movie, content_digest, movie_from_array, open_movie

__all__ = ["Movie", "content_digest", "movie_from_array", "open_movie"]
