"""Pictures beside the movie: its mean, the evidence of release, and the places that another cut would let pass."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any
from weakref import ref

import numpy as np

from .bouton_layers import add_quietly
from .layers import movie_layer, on_plane
from .panel import bare_viewer, model_of

if TYPE_CHECKING:
    from napari.layers import Layer

MEAN, EVIDENCE, PASSING = "mean", "evidence", "would be found"
_COLOUR = "#ff8a5c"
_SIZE_FWHM = 3.2
_FWHM_PER_SIGMA = 2.354820


class PictureLayers:
    """Adds pictures to a viewer and takes them away again; each lies just above the movie."""

    def __init__(self, viewer: Any) -> None:
        viewer = bare_viewer(viewer)
        self._viewer = ref(viewer)
        self.model = model_of(viewer)
        self._layers: dict[str, Any] = {}

    def layer(self, name: str) -> Layer | None:
        """Return one of the layers, if it is in the viewer."""
        found, viewer = self._layers.get(name), self._viewer()
        layer = None if found is None else found()
        return layer if layer is not None and viewer is not None and layer in viewer.layers else None

    def show_mean(self, shown: bool) -> bool:
        """Show the mean image, or take it away; tell whether it is shown."""
        traced = self.model.traced
        if not shown or traced is None:
            self.remove(MEAN)
            return False
        mean = np.asarray(traced.recording.optics.mean_image)
        low, high = np.percentile(mean, (0.5, 99.8))
        return self._show(MEAN, mean, limits=(float(low), float(high)), above=None, colormap="gray")

    def show_evidence(self, shown: bool) -> bool:
        """Show the evidence of release at every pixel, or take it away; tell whether it is shown."""
        sites = self.model.sites()
        if not shown or sites is None or not np.any(sites.evidence):
            self.remove(EVIDENCE)
            return False
        top = float(np.percentile(sites.evidence, 99.8))
        cut = sites.evidence_cut if np.isfinite(sites.evidence_cut) else 0.0
        limits = (0.0, max(top, 4.0 * cut))
        return self._show(EVIDENCE, sites.evidence, limits=limits, above=MEAN, colormap="magma", gamma=0.5)

    def show_passing(self, false_discovery: float | None) -> tuple[int, float] | None:
        """Mark the maxima that would pass where so large a share of false ones is accepted, None to take them away.

        Returns
        -------
        (int, float) or None
            How many pass, and the cut (nats).
        """
        from napari.layers import Points

        viewer, sites = self._viewer(), self.model.sites()
        movie = None if viewer is None else movie_layer(viewer)
        maxima = None if sites is None else sites.maxima
        if false_discovery is None or maxima is None or sites is None or viewer is None or movie is None:
            self.remove(PASSING)
            return None
        passed, cut = maxima.passing(false_discovery)
        places = np.column_stack([maxima.y_px, maxima.x_px])[passed].astype(np.float64)
        layer: Any = self.layer(PASSING)
        if layer is None:
            layer = Points(ndim=2, name=PASSING, **on_plane(movie))
            layer.editable = False
            add_quietly(viewer, layer)
            self._layers[PASSING] = ref(layer)
        layer.editable = True
        layer.data = places
        layer.selected_data = set()
        layer.size = _SIZE_FWHM * _FWHM_PER_SIGMA * sites.spot_sigma_px
        layer.symbol = "square"
        layer.face_color = "transparent"
        layer.border_color = _COLOUR
        layer.border_width = 0.06
        layer.editable = False
        return len(places), cut

    def remove(self, *names: str) -> None:
        """Take pictures away; all where none is named."""
        viewer = self._viewer()
        for name in names or tuple(self._layers):
            layer = self.layer(name)
            if layer is not None and viewer is not None:
                viewer.layers.remove(layer)
            self._layers.pop(name, None)

    def _show(self, name: str, image: Any, *, limits: tuple[float, float], above: str | None, **look: Any) -> bool:
        from napari.layers import Image

        viewer = self._viewer()
        movie = None if viewer is None else movie_layer(viewer)
        if viewer is None or movie is None:
            return False
        limits = (limits[0], max(limits[1], limits[0] + 1e-6))
        layer: Any = self.layer(name)
        if layer is None:
            layer = Image(image, name=name, contrast_limits=limits, **look, **on_plane(movie))
            below = None if above is None else self.layer(above)
            add_quietly(viewer, layer, above=movie if below is None else below)
            self._layers[name] = ref(layer)
        elif layer.data is not image:
            layer.data = image
            layer.contrast_limits_range = limits
            layer.contrast_limits = limits
        return True
