"""Every choice of an analysis, with its default, unit and range: the only home of defaults."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, model_validator


class _Step(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", validate_default=True)


class RecordingSettings(_Step):
    """Reading the movie, movement and light."""

    channel: Annotated[
        int | None, Field(ge=0, description="channel to analyse, from 0, where the movie has several")
    ] = None
    correct_motion: Annotated[bool, Field(description="follow the sample's movement")] = True
    max_shift_px: Annotated[float, Field(gt=0, description="largest movement expected, px")] = 12.0


class DetectionSettings(_Step):
    """Finding boutons."""

    bouton_um: Annotated[float, Field(gt=0, description="full width at half maximum of a bouton's image, µm")] = 0.6
    spacing_um: Annotated[float, Field(gt=0, description="smallest distance between two boutons, µm")] = 0.7
    false_discovery: Annotated[
        float, Field(gt=0, lt=1, description="expected share of false ones among boutons found by their responses")
    ] = 0.05
    shape_candidates: Annotated[bool, Field(description="also take spots of the mean image, silent or not")] = True
    footprint: Annotated[
        Literal["weighted", "disc"],
        Field(description="weighted: by photon noise, most precise; disc: plain disc of half-maximum diameter"),
    ] = "weighted"


class SelectionSettings(_Step):
    """Which boutons the detection would have missed."""

    planted: Annotated[
        int, Field(ge=0, le=5000, description="boutons simulated at each release probability; 0 leaves it out")
    ] = 400


class ResponseSettings(_Step):
    """Traces and amplitudes."""

    background_um: Annotated[
        float, Field(gt=0, description="radius within which the local background is fitted, µm")
    ] = 2.5
    baseline_s: Annotated[
        float | None, Field(gt=0, description="time before the first pulse that a trial's fit uses, s")
    ] = None
    slope: Annotated[bool, Field(description="let the baseline of each trial slope")] = False
    baseline: Annotated[
        Literal["bleaching", "trial", "percentile"],
        Field(description="F0: smooth bleaching curve, mean before each trial, or running percentile"),
    ] = "bleaching"
    percentile: Annotated[float, Field(gt=0, lt=100, description="which percentile, where F0 is a running one")] = 20.0
    percentile_s: Annotated[float, Field(gt=0, description="length of the running percentile, s")] = 20.0
    false_spontaneous: Annotated[
        float, Field(gt=0, description="spontaneous releases a bouton that noise may feign in one recording")
    ] = 0.1


class ReporterSettings(_Step):
    """Saturation of the reporter, undone before amplitudes are fitted."""

    max_dff: Annotated[
        float | None, Field(gt=0, description="dF/F of the fully bound reporter; none: it is taken as linear")
    ] = None
    hill: Annotated[float, Field(gt=0, description="Hill coefficient of its binding")] = 1.0
    rest_share: Annotated[
        float | None, Field(gt=0, lt=1, description="share bound at rest; needed where hill is not 1")
    ] = None

    @model_validator(mode="after")
    def _rest_is_known(self) -> ReporterSettings:
        if self.hill != 1 and self.rest_share is None:
            raise ValueError("needs rest_share where hill is not 1")
        return self


class CallSettings(_Step):
    """Which responses count as a release."""

    threshold_sd: Annotated[float, Field(gt=0, description="call threshold, in noise_sd")] = 2.5
    threshold_rule: Annotated[
        Literal["sd", "balanced"],
        Field(description="sd: threshold_sd × noise_sd; balanced: expected misses equal expected false calls"),
    ] = "sd"
    exclude_stimulus_failures: Annotated[
        bool, Field(description="leave out stimuli that are suspected to have reached no bouton")
    ] = False
    stimulus_failure_cut: Annotated[
        float,
        Field(ge=0.5, lt=1, description="probability of having reached no bouton above which a stimulus is suspected"),
    ] = 0.5


class QuantalSettings(_Step):
    """The binomial release model."""

    n_max: Annotated[int, Field(ge=1, le=30, description="largest number of release sites tried")] = 8
    q_cv: Annotated[float, Field(gt=0, lt=1.5, description="expected variation of one vesicle's size (CV)")] = 0.3
    q_cv_doubt: Annotated[float, Field(gt=0, lt=2, description="how loosely that is held: SD of its logarithm")] = 0.15
    bootstrap: Annotated[int, Field(ge=0, description="simulated repeats for the goodness of fit; 0 leaves it out")] = (
        200
    )


class PairSettings(_Step):
    """Pulse pairs."""

    bootstrap: Annotated[int, Field(ge=100, description="resamplings of the trials for the ratio's interval")] = 4000


class AxonSettings(_Step):
    """What the boutons of one axon say together."""

    permutations: Annotated[
        int, Field(ge=99, le=100_000, description="random orders for each test of the axon as a whole")
    ] = 999
    neighbours: Annotated[
        Literal["binary", "row"],
        Field(description="weights of Moran's I; binary: each pair counts once; row: each bouton counts once"),
    ] = "binary"
    block_trials: Annotated[
        int, Field(ge=4, description="trials within which co-release is compared, so that slow changes do not count")
    ] = 20


class TrainSettings(_Step):
    """Trains of pulses, and pulse pairs at several intervals."""

    late_pulses: Annotated[
        int, Field(ge=2, description="last pulses of a train through whose cumulative amplitudes the line goes")
    ] = 4
    same_interval_s: Annotated[
        float, Field(ge=0, description="pulse intervals that differ by no more than this count as the same, s")
    ] = 0.001


class Settings(_Step):
    """All settings of one analysis."""

    recording: RecordingSettings = RecordingSettings()
    detection: DetectionSettings = DetectionSettings()
    selection: SelectionSettings = SelectionSettings()
    responses: ResponseSettings = ResponseSettings()
    reporter: ReporterSettings = ReporterSettings()
    calls: CallSettings = CallSettings()
    quanta: QuantalSettings = QuantalSettings()
    pairs: PairSettings = PairSettings()
    trains: TrainSettings = TrainSettings()
    axon: AxonSettings = AxonSettings()
    seed: Annotated[int, Field(ge=0, description="seed of every random number")] = 1
