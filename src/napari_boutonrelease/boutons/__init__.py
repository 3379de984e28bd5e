"""Places: where release is seen, boutons found there, and the weights with which each is read."""

from __future__ import annotations

from .axon_path import trace_axon
from .cuts import Cuts, Maxima
from .detection import Detection, detect_boutons, detect_by_shape
from .evidence import MatchedMaps, matched_filter, mixture_evidence, release_posterior, standardise
from .false_discovery import FalseRate, measure_false_rate
from .footprints import (
    Footprints,
    build_footprints,
    crosstalk_matrix,
    drawn_pixels,
    footprints_from_labels,
)
from .maps import ResponseStack, project_responses, scan_shapes
from .optics import Optics
from .planting import PlantedBoutons, plant_boutons
from .positions import GivenBoutons, distance_along, read_axon, read_positions
from .quiet_places import QuietPlaces
from .shape_candidates import ShapeCandidates, find_shape_candidates
from .spots import estimate_spot_sigma

__all__ = [
    "Cuts",
    "Detection",
    "FalseRate",
    "Footprints",
    "GivenBoutons",
    "MatchedMaps",
    "Maxima",
    "Optics",
    "PlantedBoutons",
    "QuietPlaces",
    "ResponseStack",
    "ShapeCandidates",
    "build_footprints",
    "crosstalk_matrix",
    "detect_boutons",
    "detect_by_shape",
    "distance_along",
    "drawn_pixels",
    "estimate_spot_sigma",
    "find_shape_candidates",
    "footprints_from_labels",
    "matched_filter",
    "measure_false_rate",
    "mixture_evidence",
    "plant_boutons",
    "project_responses",
    "read_axon",
    "read_positions",
    "release_posterior",
    "scan_shapes",
    "standardise",
    "trace_axon",
]
