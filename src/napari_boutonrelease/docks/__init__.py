"""The docks: what a person sees of an analysis in napari, and changes there. Nothing is computed here."""
