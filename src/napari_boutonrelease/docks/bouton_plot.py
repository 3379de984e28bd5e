"""A plot of the selected bouton: what is new is filled in, what is only selected otherwise is moved."""

from __future__ import annotations

from .live_plot import LivePlot
from .panel import Panel
from .shown_bouton import ShownBouton


class BoutonPlot(LivePlot):
    """Base of plots that show one bouton, or all of them with one selected."""

    def __init__(self, panel: Panel, *, height_px: int = 130) -> None:
        self._shown: ShownBouton | None = None
        super().__init__(panel, height_px=height_px)

    def same_data(self, before: ShownBouton, now: ShownBouton) -> bool:
        """Tell whether at most the moving artists differ between two states. A subclass has to say how."""
        raise NotImplementedError

    def show_bouton(self, shown: ShownBouton | None) -> None:
        """Show another bouton, or the same with other results or another selection."""
        before, self._shown = self._shown, shown
        if before is not None and shown is not None and self.same_data(before, shown):
            self.move()
        else:
            self.refill()
