"""Every choice of a comparison, with its default, unit and range."""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field


class CompareSettings(BaseModel):
    """Comparing recordings of the same boutons."""

    model_config = ConfigDict(frozen=True, extra="forbid", validate_default=True)

    match_um: Annotated[float, Field(gt=0, description="how far apart the two positions of one bouton may lie, µm")] = (
        0.6
    )
    n_max: Annotated[int, Field(ge=1, le=30, description="largest number of release sites tried")] = 8
    q_cv: Annotated[float, Field(gt=0, lt=1.5, description="expected variation of one vesicle's size (CV)")] = 0.3
    q_cv_doubt: Annotated[float, Field(gt=0, lt=2, description="how loosely that is held: SD of its logarithm")] = 0.15
    bootstrap: Annotated[int, Field(ge=100, description="resamplings of the trials for intervals of ratios")] = 2000
    same_interval_s: Annotated[
        float, Field(ge=0, description="pulse intervals that differ by no more count as the same, s")
    ] = 0.001
    seed: Annotated[int, Field(ge=0, description="seed of every random number")] = 1
