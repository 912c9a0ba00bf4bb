"""One segment through the room stage: spectra of all channels in, spectra of the talkers out.

    predict -> refine -> masks and filters -> predict again, by the talkers' power -> filters -> restore -> gain

Everything but the refinement works per frequency, and is shared out over bands.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from unmix.room.bands import Bands
from unmix.room.linalg import power
from unmix.room.post import background_level, distortionless, frame_weights, gains, posterior_masks, restore
from unmix.room.prediction import predict
from unmix.room.refinement import Refined, independent_start, refine, scaled
from unmix.room.stft import Complexes, Reals
from unmix.settings import PostSettings, PredictionSettings, RoomSettings

__all__ = ["STAGES", "ChainResult", "Start", "run_chain"]

STAGES = ("prediction", "refinement", "filter", "restoration")
"""What changes the model's output, in order."""

_NOISE_IN_MASKS = 8.0
_NOISE_IN_GAIN = 2.0
"""Background power counted in the masks: above one, since doubtful frames had better count as nobody's."""


@dataclass(frozen=True)
class Start:
    """Where a segment starts.

    model      (frequencies, K, M): the constrained solution's separating matrix
    look       (frequencies, M, K): relative responses of the bearings, one at the reference channel
    warm       (frequencies, K, M): rows of the previous segment's matrix, None at the beginning
    """

    model: Complexes
    look: Complexes
    warm: Complexes | None = None


@dataclass(frozen=True)
class ChainResult:
    """Talkers of one segment and what was done.

    talkers    (frequencies, K, frames)
    model      the model alone, alike
    rows       refined rows, the next segment's start; None without refinement
    responses  (frequencies, M, K) relative responses that the refined matrix implies; None without refinement
    shares     energy of each stage's change of the output, (stages, K), not normalised
    """

    talkers: Complexes
    model: Complexes
    rows: Complexes | None
    responses: Complexes | None
    refined: Refined | None
    shares: Reals


def run_chain(x: Complexes, start: Start, settings: RoomSettings, reference: int, bands: Bands) -> ChainResult:
    """Carry spectra (frequencies, M, frames) through the parts that the settings name."""
    model_rows = start.model.astype(x.dtype)
    model = np.concatenate(bands.each(lambda b: model_rows[b] @ x[b]))
    z = _predicted(x, settings.prediction, bands)
    refined, rows, responses = None, model_rows, None
    if settings.refinement is not None:
        warm = start.warm is not None
        refined = refine(
            z,
            start.warm if start.warm is not None else start.model,
            start.look,
            settings.refinement,
            bands,
            iterations=settings.refinement.warm_iterations if warm else None,
        )
        rows, responses = scaled(refined.matrix, refined.talkers, reference)
    post = settings.post
    talkers = np.empty_like(model)
    k = model.shape[1]

    def finish(b: slice) -> Reals:
        dry = model_rows[b] @ z[b]
        y = rows[b] @ z[b]
        steps = [model[b], dry, y]
        if post is not None:
            filtered, early = _post(x[b], z[b], rows[b], y, post, settings.prediction, reference)
            steps += [filtered, early]
        talkers[b] = steps[-1]
        changes = [power(after - before).sum(axis=(0, 2)) for before, after in pairwise(steps)]
        return np.stack(changes + [np.zeros(k, changes[0].dtype)] * (len(STAGES) - len(changes)))

    shares = sum(bands.each(finish))
    carried = None if refined is None else independent_start(refined.matrix[:, :k])
    return ChainResult(talkers, model, carried, responses, refined, np.asarray(shares))


def _predicted(x: Complexes, settings: PredictionSettings | None, bands: Bands) -> Complexes:
    if settings is None:
        return x
    return np.concatenate(bands.each(lambda b: predict(x[b], settings)))


def _post(
    x: Complexes,
    z: Complexes,
    rows: Complexes,
    y: Complexes,
    post: PostSettings,
    prediction: PredictionSettings | None,
    reference: int,
) -> tuple[Complexes, Complexes]:
    """The filtered talkers, and those with their early sound restored and the gain applied."""
    if prediction is not None and prediction.again:
        # One pass over single frames is enough to know the talkers' power.
        y, _ = distortionless(z, posterior_masks(y), reference, trade_off=1.0)
        z = predict(
            x, prediction, variance=power(y).mean(axis=1), iterations=prediction.again, taps=prediction.taps_again
        )
        y = rows @ z
    y, filters = _filtered(z, y, post, reference)
    noise = _NOISE_IN_GAIN * background_level(z)[:, None] * power(filters).sum(axis=2)
    early = y
    if post.restore_lags:
        early, amplified = restore(y, x[:, reference], lags=post.restore_lags, keep=post.restore_keep)
        noise = noise * amplified
    return y, gains(early, noise, post) * early


def _filtered(z: Complexes, y: Complexes, post: PostSettings, reference: int) -> tuple[Complexes, Complexes]:
    """Single-frame passes, each driven by the masks of the one before; then one over several frames."""
    background = background_level(z)[:, None]
    noise: Reals | float = 0.0
    for _ in range(post.passes):
        y, filters = distortionless(z, posterior_masks(y, noise), reference, trade_off=1.0)
        noise = _NOISE_IN_MASKS * (background * power(filters).sum(axis=2)).mean(axis=1)[:, None, None]
    masks, weight = posterior_masks(y, noise), frame_weights(z, post.level_weight)
    return distortionless(z, masks, reference, past=post.past, future=post.future, trade_off=1.0, weight=weight)
