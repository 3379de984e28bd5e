"""The recordings of napari's sample menu: simulated, seeded, with protocol and truth in the layer's metadata."""

from __future__ import annotations

from typing import Any

LayerData = tuple[Any, dict[str, Any], str]

_SEED = 1


def fast_pair() -> list[LayerData]:
    """Return an axon with a fast reporter and pulse pairs, as one image layer."""
    return _sample("fast-pair")


def slow_single() -> list[LayerData]:
    """Return an axon with a slow reporter and single pulses, as one image layer."""
    return _sample("slow-single")


def _sample(preset: str) -> list[LayerData]:
    import numpy as np
    from napari.utils import progress

    from .simulation.movie import protocol_of, simulate_recording
    from .simulation.presets import preset_recipe

    recipe = preset_recipe(preset)
    with progress(total=recipe.n_frames, desc=f"Simulating {preset}") as bar:
        simulation = simulate_recording(
            recipe,
            rng=np.random.default_rng(_SEED),
            progress=lambda done, _: bar.update(done - bar.n),  # the window may breathe meanwhile
        )
    layer = {
        "name": f"boutons {preset}",
        "scale": (recipe.frame_interval_s, recipe.pixel_size_um, recipe.pixel_size_um),
        "units": ("s", "um", "um"),
        "axis_labels": ("t", "y", "x"),
        "metadata": {"protocol": protocol_of(recipe), "truth": simulation.truth},
    }
    return [(simulation.frames, layer, "image")]
