"""Every setting of a variant: one frozen struct per part, each field with its type, range, default and meaning.

Units are in the fields' names. Defaults are what measured best; `variant.py` puts parts together to presets.
"""

from __future__ import annotations

from typing import Annotated, Literal

import msgspec
from msgspec import Meta

__all__ = [
    "LowLatencySettings",
    "ModelSettings",
    "PostSettings",
    "PredictionSettings",
    "RefinementSettings",
    "RoomSettings",
    "SegmentSettings",
    "SolverSettings",
    "TransformSettings",
]


class _Strict(msgspec.Struct, forbid_unknown_fields=True, kw_only=True, frozen=True):
    pass


class ModelSettings(_Strict, kw_only=True, frozen=True):
    """How a delayed talker is written with its derivatives."""

    anchor: Annotated[Literal["nearest", "own"], Meta(description="sample about which delays are expanded")] = "nearest"
    order: Annotated[int, Meta(ge=0, le=12, description="highest derivative of the expansion")] = 8
    differentiator: Annotated[
        Literal["least-squares", "finite-difference"], Meta(description="family of derivative filters")
    ] = "least-squares"
    error_db: Annotated[
        float,
        Meta(ge=-120.0, le=0.0, description="error allowed for a delay of half a sample; sets the filters' width"),
    ] = -60.0
    band_edge: Annotated[
        float,
        Meta(gt=0.0, lt=1.0, description="where that error must still hold, a fraction of the Nyquist frequency"),
    ] = 0.9
    moving_error_db: Annotated[
        float, Meta(ge=-120.0, le=0.0, description="the same while something moves, when width costs time")
    ] = -45.0
    moving_band_edge: Annotated[
        float, Meta(gt=0.0, lt=1.0, description="where that error must still hold, a fraction of the Nyquist frequency")
    ] = 0.8
    half_width: Annotated[
        Annotated[int, Meta(ge=1, le=64)] | None,
        Meta(description="width of the filters in samples to either side, instead of chosen"),
    ] = None
    wave: Annotated[
        Literal["auto", "plane"], Meta(description="auto: spherical where a distance is given; plane: never")
    ] = "auto"


class SolverSettings(_Strict, kw_only=True, frozen=True):
    """How each block is solved."""

    constraint: Annotated[
        Literal["tied", "propagated", "free"], Meta(description="what couples the jets of neighbouring samples")
    ] = "tied"
    method: Annotated[
        Literal["stationary", "reduced", "kkt", "convex"], Meta(description="how the least-squares problem is solved")
    ] = "stationary"
    noise: Annotated[
        Literal["white", "diffuse", "measured", "fitted", "observed"], Meta(description="covariance of the noise")
    ] = "white"
    self_noise_db: Annotated[
        float, Meta(ge=-60.0, le=20.0, description="microphones' own noise relative to the diffuse field")
    ] = -20.0
    whitening_half_width: Annotated[
        int, Meta(ge=4, le=400, description="samples that the whitening filter reaches to either side")
    ] = 64
    prior: Annotated[
        Literal["none", "flat", "speech"], Meta(description="what is believed of a talker before listening")
    ] = "flat"
    prior_weight: Annotated[
        float, Meta(ge=0.0, le=10.0, description="weight of the prior, relative to the mean diagonal of H'R^-1 H")
    ] = 1e-6
    tail: Annotated[
        float, Meta(gt=0.0, le=0.1, description="share of a filter's magnitude that its cut-off tail may hold")
    ] = 1e-6
    block_s: Annotated[
        Annotated[float, Meta(gt=0.0, le=120.0)] | None,
        Meta(description="seconds kept of each block, instead of four margins"),
    ] = None
    hold_s: Annotated[float, Meta(gt=0.0, le=0.1, description="seconds for which moving delays are held")] = 1e-3
    huber: Annotated[
        Annotated[float, Meta(gt=0.0)] | None,
        Meta(description="convex: residual, in noise deviations, beyond which it counts linearly"),
    ] = None
    clip_level: Annotated[
        Annotated[float, Meta(gt=0.0, le=1.0)] | None,
        Meta(description="convex: magnitude from which a sample counts as clipped"),
    ] = None
    peak: Annotated[
        Annotated[float, Meta(gt=0.0)] | None, Meta(description="convex: bound on the magnitude of each talker")
    ] = None
    convex_solver: Annotated[Literal["CLARABEL", "OSQP"], Meta(description="convex: which solver")] = "CLARABEL"


class TransformSettings(_Strict, kw_only=True, frozen=True):
    """Short-time Fourier transform that prediction, refinement and post filter share."""

    frame_s: Annotated[
        float, Meta(ge=0.008, le=0.512, description="frame length; rounded to a fast multiple of the overlap")
    ] = 0.128
    overlap: Annotated[int, Meta(ge=2, le=16, description="frames that cover each sample: hop = frame / overlap")] = 4
    precision: Annotated[Literal["single", "double"], Meta(description="arithmetic of the whole stage")] = "single"


class PredictionSettings(_Strict, kw_only=True, frozen=True):
    """Late reverberation predicted from the past of all channels and subtracted (weighted prediction error)."""

    taps: Annotated[int, Meta(ge=1, le=40, description="frames of the past that predict")] = 5
    delay: Annotated[
        int,
        Meta(
            ge=1,
            le=20,
            description="frames between the past and the present; protects direct sound and early reflections",
        ),
    ] = 2
    iterations: Annotated[int, Meta(ge=1, le=10, description="reweightings before the refinement")] = 2
    again: Annotated[
        int, Meta(ge=0, le=5, description="reweightings after the refinement, by the power of the separated talkers")
    ] = 1
    taps_again: Annotated[int, Meta(ge=1, le=40, description="frames that predict, after the refinement")] = 8
    recursive: Annotated[
        bool, Meta(description="frame by frame with forgetting, for streaming; without refinement and post only")
    ] = False
    forgetting_s: Annotated[
        float, Meta(ge=0.1, le=600.0, description="recursive: time constant of what is remembered")
    ] = 10.0
    floor_db: Annotated[
        float, Meta(ge=-120.0, le=-10.0, description="lowest weight, below the loudest frame of each frequency")
    ] = -50.0


class RefinementSettings(_Strict, kw_only=True, frozen=True):
    """Auxiliary-function iteration on the separating matrix (overdetermined independent vector analysis)."""

    iterations: Annotated[int, Meta(ge=1, le=200, description="updates from the constrained solution")] = 30
    warm_iterations: Annotated[
        int, Meta(ge=1, le=200, description="updates when a previous segment's matrix is the start")
    ] = 15
    source_model: Annotated[
        Literal["frame", "low-rank"],
        Meta(description="talker variance: one figure per frame, or nonnegative factors over frequency and time"),
    ] = "low-rank"
    components: Annotated[int, Meta(ge=1, le=64, description="nonnegative components per talker (low-rank)")] = 16
    look_weight: Annotated[
        float, Meta(ge=0.0, le=100.0, description="pull of each row toward zeros at the other talkers' bearings")
    ] = 0.1


class LearnedSettings(_Strict, kw_only=True, frozen=True):
    """The constrained solve once more, with the responses learned by the refinement in place of pure delays."""

    noise: Annotated[
        Literal["observed", "white"],
        Meta(description="covariance of the noise: the recording's own (least output power), or white"),
    ] = "observed"
    loading: Annotated[
        float, Meta(ge=0.0, le=1.0, description="added to the observed covariance, relative to its mean diagonal")
    ] = 1e-4
    prior_weight: Annotated[
        float, Meta(ge=0.0, le=10.0, description="weight of the flat prior, relative to the mean diagonal of A'R^-1 A")
    ] = 1e-6


class PostSettings(_Strict, kw_only=True, frozen=True):
    """Posterior masks that drive a distortionless filter, and the talker's early sound restored."""

    passes: Annotated[
        int, Meta(ge=1, le=5, description="mask, filter, mask again: single-frame passes, then one over `lags`")
    ] = 1
    past: Annotated[int, Meta(ge=0, le=4, description="past frames in the last filter")] = 1
    future: Annotated[int, Meta(ge=0, le=4, description="future frames in the last filter")] = 1
    level_weight: Annotated[
        float, Meta(ge=0.0, le=1.0, description="0: loud frames decide the filter; 1: all frames count alike")
    ] = 0.25
    restore_lags: Annotated[
        int,
        Meta(
            ge=0,
            le=30,
            description="frames of response fitted from the talkers to the reference microphone; 0: no restoration",
        ),
    ] = 6
    restore_keep: Annotated[
        int, Meta(ge=0, le=4, description="frames on either side of the direct sound that are kept as the early sound")
    ] = 1
    trade_off: Annotated[
        float,
        Meta(
            ge=0.0,
            le=100.0,
            description="noise against speech distortion: 0 distortionless, 1 Wiener, more for less leakage",
        ),
    ] = 1.0
    leak: Annotated[
        float,
        Meta(
            ge=0.0,
            le=1.0,
            description="share of the other talkers' power assumed left in a talker's output; 0: no gain",
        ),
    ] = 0.005
    gain_floor: Annotated[float, Meta(ge=0.0, le=1.0, description="lowest gain of the mask; 1: no mask")] = 0.2


class SegmentSettings(_Strict, kw_only=True, frozen=True):
    """Stretches solved at once; a shorter one follows moving talkers and has poorer statistics."""

    length_s: Annotated[float, Meta(ge=1.0, le=120.0, description="segment length")] = 30.0
    moving_length_s: Annotated[
        float, Meta(ge=1.0, le=120.0, description="segment length while a talker moves or the array turns")
    ] = 4.0
    most_turn_deg: Annotated[
        float, Meta(ge=0.0, description="bearings that turn by more within a segment: the model alone")
    ] = 150.0
    context_s: Annotated[
        float, Meta(ge=0.1, le=10.0, description="sound before the segment that is processed with it")
    ] = 1.0
    fade_s: Annotated[float, Meta(ge=0.0, le=1.0, description="cross-fade between segments")] = 0.25


class LowLatencySettings(_Strict, kw_only=True, frozen=True):
    """The streaming form: the separating matrix learned from past frames, filters that see little of the future."""

    look_ahead_s: Annotated[float, Meta(ge=0.0, le=0.1, description="future that the filters see")] = 0.012
    block_s: Annotated[float, Meta(ge=0.0005, le=0.05, description="samples filtered at once; adds to the latency")] = (
        0.004
    )
    forgetting_s: Annotated[float, Meta(ge=0.1, le=600.0, description="time constant of the statistics")] = 4.0
    prior_s: Annotated[
        float, Meta(ge=0.0, le=60.0, description="seconds of sound that the bearings alone count for at first")
    ] = 0.5


class RoomSettings(_Strict, kw_only=True, frozen=True):
    """What the room stage does. A part that is absent is left out."""

    transform: TransformSettings = TransformSettings()
    prediction: PredictionSettings | None = PredictionSettings()
    refinement: RefinementSettings | None = RefinementSettings()
    learned: LearnedSettings | None = LearnedSettings()
    post: PostSettings | None = PostSettings()
    segments: SegmentSettings = SegmentSettings()
    low_latency: LowLatencySettings | None = None
    judge: Annotated[
        bool,
        Meta(description="judge from recording and output whether the stage helped; fall back where it did not"),
    ] = True
