"""How boutons are marked in the image: a ring each, by how it was found or by a number measured there."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from ..analysis.columns import BOUTONS
from ..analysis.model import AnalysisModel
from ..analysis.sites import Sites

if TYPE_CHECKING:
    import pandas as pd
    from napari.layers import Points
    from napari.utils import Colormap

FOUND_BY = {
    "responses": ("#7cc0ff", "disc"),
    "both": ("#7fe0c8", "diamond"),
    "shape": ("#f2b44e", "square"),
    "hand": ("#f29fd0", "triangle_up"),
    "file": ("#e6e6e6", "star"),
}
"""Colour and symbol of each way in which a bouton is found; both differ, and stand out on a dark image."""

SILENT, NO_NUMBER = "x", "cross"
"""Symbols of boutons that show no release, and of those without the number that gives the colours."""
COLOURING = "shown"
"""Feature that gives the colours: of one name whatever it holds, because napari warns of one that is left out."""
_NO_COLOUR = "#9aa3ab"
_SHOWN = ("p_release", "ppr", "q")
_SIZE_FWHM = 2.4
_FWHM_PER_SIGMA = 2.354820


@dataclass(frozen=True, slots=True, kw_only=True)
class Marks:
    """What the marks show, one a bouton.

    Attributes
    ----------
    bouton, y_px, x_px : (n,) ndarray
        Ids and places.
    features : DataFrame
        Of the layer.
    size_px : float
        Of a mark.
    column : str or None
        Column of the table of boutons that gives the colours.
    limits : (float, float)
        Of the colour bar.
    """

    bouton: NDArray[np.int64]
    y_px: NDArray[np.float64]
    x_px: NDArray[np.float64]
    features: pd.DataFrame
    size_px: float
    column: str | None
    limits: tuple[float, float]

    def like(self, other: Marks) -> bool:
        """Whether other marks look the same."""
        return (
            (self.size_px, self.column, self.limits) == (other.size_px, other.column, other.limits)
            and np.array_equal(self.y_px, other.y_px)
            and np.array_equal(self.x_px, other.x_px)
            and self.features.equals(other.features)
        )

    @classmethod
    def none(cls) -> Marks:
        """Return no marks."""
        import pandas as pd

        nothing = np.empty(0)
        return cls(
            bouton=np.empty(0, dtype=np.int64),
            y_px=nothing,
            x_px=nothing,
            features=pd.DataFrame({"bouton": np.empty(0, dtype=np.int64), "found_by": np.empty(0, dtype=object)}),
            size_px=1.0,
            column=None,
            limits=(0.0, 1.0),
        )


def marks_of(model: AnalysisModel, sites: Sites, *, column: str | None) -> Marks:
    """Return the marks of boutons as they are now; numbers are those last measured at the same ids."""
    import pandas as pd

    features = pd.DataFrame({"bouton": sites.bouton, "found_by": list(sites.found_by)})
    wanted = list(_SHOWN)
    measured = model.measured
    table = model.table("boutons") if measured is not None else pd.DataFrame({"bouton": []})
    at = table.set_index("bouton").reindex(sites.bouton)
    for name in wanted:
        features[name] = at[name].to_numpy(dtype=np.float64, na_value=np.nan) if name in at else np.nan
    features[COLOURING] = at[column].to_numpy(dtype=np.float64, na_value=np.nan) if column in at else np.nan
    flags: list[Any] = list(at["flags"]) if "flags" in at else [""] * len(sites.bouton)
    features["silent"] = [isinstance(codes, str) and "silent" in codes.split(";") for codes in flags]
    # What was edited since has no numbers yet: those of its id are of another place.
    if measured is not None and measured.edits != model.edits:
        features.loc[~_same_place(sites, measured.places), [*wanted, COLOURING]] = np.nan
    return Marks(
        bouton=sites.bouton,
        y_px=sites.y_px,
        x_px=sites.x_px,
        features=features,
        size_px=_SIZE_FWHM * _FWHM_PER_SIGMA * sites.spot_sigma_px,
        column=column,
        limits=colour_range(column, features[COLOURING].to_numpy()) if column else (0.0, 1.0),
    )


def show_marks(points: Points, marks: Marks) -> None:
    """Give a points layer the marks."""
    points.selected_data = set()
    points.data = np.column_stack([marks.y_px, marks.x_px])
    points.features = marks.features
    points.text.translation = np.array([-0.3, 0.4]) * marks.size_px  # beside the ring
    if len(marks.bouton):
        points.size = marks.size_px
        points.face_color = "transparent"
        points.border_width = 0.1
        points.symbol = _symbols(marks)
        if marks.column is None:
            ways = marks.features["found_by"]
            points.border_color = np.array([_rgba(FOUND_BY[way][0]) for way in ways])
        else:
            points.border_colormap = sequential()
            points.border_color = COLOURING
            points.border_color_mode = "colormap"
            points.border_contrast_limits = marks.limits
    bar = getattr(points, "border_colorbar", None)
    if bar is not None:
        bar.visible = marks.column is not None


def shows(points: Points, marks: Marks) -> bool:
    """Whether a layer's points are where the marks are; a person may have dragged, added or removed some."""
    return np.array_equal(points.data, np.column_stack([marks.y_px, marks.x_px]))


def _symbols(marks: Marks) -> list[str]:
    """Symbols say how a bouton was found, or, where colours are a number, whether there is one."""
    if marks.column is None:
        return [FOUND_BY[way][1] for way in marks.features["found_by"]]
    known = np.isfinite(marks.features[COLOURING].to_numpy(dtype=np.float64))
    silent = marks.features["silent"].to_numpy(dtype=bool)
    return [str(one) for one in np.where(silent, SILENT, np.where(known, "disc", NO_NUMBER))]


@lru_cache(maxsize=1)
def sequential() -> Colormap:
    """Colours from low to high that can be told apart with any colour vision and stand out on a dark image."""
    from napari.utils import Colormap
    from napari.utils.colormaps import ensure_colormap

    viridis = ensure_colormap("viridis")
    return Colormap(
        viridis.map(np.linspace(0.33, 1.0, 64)), name="boutons", display_name="boutons", nan_color=_NO_COLOUR
    )


def colour_range(column: str, value: NDArray[np.float64]) -> tuple[float, float]:
    """Return the range that the colours of a column span: a probability's is the whole, others begin at zero."""
    known = value[np.isfinite(value)]
    if is_probability(column) or not known.size:
        return 0.0, 1.0
    low, high = float(min(known.min(), 0.0)), float(known.max())
    return low, high if high > low else low + 1.0


def is_probability(column: str) -> bool:
    """Tell whether a column of the table of boutons lies between 0 and 1."""
    return any(one.name == column and one.constraints.get("maximum") == 1 for one in BOUTONS.columns)


def _same_place(sites: Sites, places: Any) -> NDArray[np.bool_]:
    rows = {int(bouton): row for row, bouton in enumerate(places.bouton)}
    same = np.zeros(len(sites.bouton), dtype=np.bool_)
    for i, bouton in enumerate(sites.bouton):
        row = rows.get(int(bouton))
        if row is not None:
            footprints = places.footprints
            same[i] = np.hypot(footprints.y_px[row] - sites.y_px[i], footprints.x_px[row] - sites.x_px[i]) < 1e-6
    return same


def _rgba(colour: str) -> tuple[float, float, float, float]:
    red, green, blue = (int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5))
    return red, green, blue, 1.0
