"""Stacks of response maps with known releases, drawn without a movie."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pytest

from napari_boutonrelease.boutons import Detection, ResponseStack, detect_boutons
from napari_boutonrelease.response_shape import ResponseShape

SHAPE = ResponseShape(latency_s=0.0, rise_s=0.002, decay_s=0.05)
SIGMA_PX = 1.4
SPACING_PX = 3.9


def spot(y: float, x: float, *, shape: tuple[int, int], sigma: float = SIGMA_PX) -> np.ndarray:
    rows, columns = np.mgrid[: shape[0], : shape[1]]
    return np.exp(-0.5 * ((rows - y) ** 2 + (columns - x) ** 2) / sigma**2)


@dataclass(kw_only=True)
class Scene:
    """An axon along the middle row. `q_sd` is one vesicle over the noise of an ideal reading of the bouton."""

    y: np.ndarray
    x: np.ndarray
    p: np.ndarray
    q_sd: np.ndarray
    shape: tuple[int, int] = (64, 160)
    n_trials: int = 80
    n_null: int = 80
    sigma: float = SIGMA_PX
    brightness: float = 200.0
    q_cv: float = 0.3
    static_y: np.ndarray = field(default_factory=lambda: np.empty(0))
    static_x: np.ndarray = field(default_factory=lambda: np.empty(0))
    wobble_px: float = 0.0

    def stack(self, rng: np.random.Generator) -> ResponseStack:
        factor = 0.5
        rows = np.mgrid[: self.shape[0], : self.shape[1]][0]
        profiles = [spot(y, x, shape=self.shape, sigma=self.sigma) for y, x in zip(self.y, self.x, strict=True)]
        static = [
            spot(y, x, shape=self.shape, sigma=self.sigma) for y, x in zip(self.static_y, self.static_x, strict=True)
        ]
        light = 50.0 + 60.0 * np.exp(-0.5 * ((rows - self.shape[0] / 2) / self.sigma) ** 2)
        light = light + self.brightness * sum([*profiles, *static], np.zeros(self.shape))
        sd = (factor * np.sqrt(light)).astype(np.float32)
        evoked = sd * rng.standard_normal((self.n_trials, *self.shape), dtype=np.float32)
        null = sd * rng.standard_normal((self.n_null, *self.shape), dtype=np.float32)
        for profile, p, q_sd in zip(profiles, self.p, self.q_sd, strict=True):
            q = q_sd / np.sqrt(np.sum(profile**2 / sd.astype(float) ** 2))
            vesicles = rng.random(self.n_trials) < p
            heights = vesicles * q * np.maximum(1 + self.q_cv * rng.standard_normal(self.n_trials), 0.1)
            evoked += np.multiply.outer(heights, profile).astype(np.float32)
        if self.wobble_px:
            slope = np.gradient(light, axis=0)
            for maps in (evoked, null):
                maps += np.multiply.outer(self.wobble_px * rng.standard_normal(len(maps)), slope).astype(np.float32)
        return ResponseStack(
            evoked=evoked,
            evoked_trial=np.arange(self.n_trials),
            evoked_pulse=np.zeros(self.n_trials, dtype=np.intp),
            evoked_factor=np.full(self.n_trials, factor),
            evoked_correlation=(np.ones((1, 1)),) * self.n_trials,
            null=null,
            null_factor=np.full(self.n_null, factor),
            null_from="gaps",
            mean_image=light + np.sqrt(light / 4000) * rng.standard_normal(self.shape),
            shape=SHAPE,
        )


@pytest.fixture
def axon() -> Callable[..., Scene]:
    """Boutons 12 px apart along the middle of the image, with p and q drawn from the ranges given."""

    def make(
        rng: np.random.Generator,
        *,
        p: tuple[float, float] = (0.1, 0.9),
        q_sd: tuple[float, float] = (3.0, 6.0),
        **kwargs: Any,
    ) -> Scene:
        height, width = kwargs.get("shape", (64, 160))
        x = np.arange(10.0, width - 6, 12)
        x = x + rng.uniform(-1.5, 1.5, x.size)
        y = height / 2 + rng.uniform(-1, 1, x.size)
        return Scene(y=y, x=x, p=rng.uniform(*p, x.size), q_sd=rng.uniform(*q_sd, x.size), **kwargs)

    return make


@pytest.fixture
def find() -> Callable[..., Detection]:
    def run(stack: ResponseStack, *, seed: int = 0, **kwargs: Any) -> Detection:
        settings: dict[str, Any] = {
            "spot_sigma_px": SIGMA_PX,
            "spacing_px": SPACING_PX,
            "false_discovery": 0.05,
            "shape_candidates": True,
            "exclude": np.zeros(stack.mean_image.shape, dtype=bool),
            "rng": np.random.default_rng(seed),
            "progress": None,
        }
        return detect_boutons(stack, **{**settings, **kwargs})

    return run
