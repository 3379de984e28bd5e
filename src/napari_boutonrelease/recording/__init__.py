"""Pixels over time and when the axon was stimulated: movies, protocols, timing, movement, light."""

from __future__ import annotations

from .light import Light, measure_light
from .motion import Drift, measure_drift, no_drift
from .movie import Movie, content_digest, file_digest, fill_dead, movie_from_array, open_movie
from .protocol import Protocol, protocol_from_dict, protocol_to_dict, read_protocol, write_protocol
from .rest import light_at_rest
from .stimuli import RegularStimuli, StimulusTable, read_stimulus_table
from .timing import Timing, frame_times_s, resolve_timing, segment_frames, stimulus_frame

__all__ = [
    "Drift",
    "Light",
    "Movie",
    "Protocol",
    "RegularStimuli",
    "StimulusTable",
    "Timing",
    "content_digest",
    "file_digest",
    "fill_dead",
    "frame_times_s",
    "light_at_rest",
    "measure_drift",
    "measure_light",
    "movie_from_array",
    "no_drift",
    "open_movie",
    "protocol_from_dict",
    "protocol_to_dict",
    "read_protocol",
    "read_stimulus_table",
    "resolve_timing",
    "segment_frames",
    "stimulus_frame",
    "write_protocol",
]
