"""One segment through the room stage: spectra of all channels in, spectra of the talkers out.

    predict -> refine -> constrained solve -> judge -> masks and filters -> predict again, by the talkers' power
    -> filters -> restore -> gain

The constrained solve after the refinement is the model's own, B = (A^H R^-1 A + Q)^-1 A^H R^-1, with the responses A
that the refined matrix implies in place of those of pure delays. Everything but the refinement works per frequency, and
is shared out over bands.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from unmix.room.bands import Bands
from unmix.room.judge import Verdict, judge
from unmix.room.linalg import adjoint, loaded, power, safe_solve
from unmix.room.post import background_level, distortionless, frame_weights, gains, posterior_masks, restore
from unmix.room.prediction import predict
from unmix.room.refinement import Refined, independent_start, refine, scaled
from unmix.room.stft import Complexes, Reals
from unmix.settings import LearnedSettings, PostSettings, PredictionSettings, RoomSettings

__all__ = ["STAGES", "ChainResult", "Look", "run_chain"]

STAGES = ("prediction", "refinement", "constrained", "filter", "restoration")
"""What changes the model's output, in order."""

_NOISE_IN_MASKS = 8.0
_NOISE_IN_GAIN = 2.0
"""Background power counted in the masks: above one, since doubtful frames had better count as nobody's."""


@dataclass(frozen=True)
class Look:
    """What the model knows of the talkers at the stage's frequencies.

    rows       (frequencies, K, M): separating matrix of the constrained solution
    responses  (frequencies, M, K): relative responses of the bearings, one at the reference channel
    course     the same over equal parts of a stretch, where something moves; else empty
    """

    rows: Complexes
    responses: Complexes
    course: tuple[Complexes, ...] = ()


@dataclass(frozen=True)
class ChainResult:
    """Talkers of one segment and what was done.

    talkers    (frequencies, K, frames); None where the verdict is that the model alone is better
    rows       refined rows, the next segment's start; None without refinement
    responses  (frequencies, M, K) relative responses that the refined matrix implies; None without refinement
    verdict    whether the stage helps; None where nothing was learned
    shares     energy of each stage's change of the output, (stages, K), not normalised
    """

    talkers: Complexes | None
    rows: Complexes | None
    responses: Complexes | None
    refined: Refined | None
    verdict: Verdict | None
    shares: Reals


def run_chain(
    x: Complexes,
    look: Look,
    settings: RoomSettings,
    reference: int,
    bands: Bands,
    frequencies_hz: NDArray[np.float64],
    *,
    warm: Complexes | None = None,
) -> ChainResult:
    """Carry spectra (frequencies, M, frames) through the parts that the settings name.

    ``warm`` (frequencies, K, M) are the rows of the previous segment's matrix, to start from in place of the model's.
    """
    model_rows, bearings = look.rows.astype(x.dtype), look.responses.astype(x.dtype)
    z = _predicted(x, settings.prediction, bands)
    refined, responses, verdict = None, None, None
    steps = [model_rows]
    if settings.refinement is not None:
        refined = refine(
            z,
            look.rows if warm is None else warm,
            bearings,
            settings.refinement,
            bands,
            iterations=None if warm is None else settings.refinement.warm_iterations,
        )
        rows, responses = scaled(refined.matrix, refined.talkers, reference)
        steps.append(rows)
        if settings.learned is not None:
            steps.append(_constrained(z, responses, settings.learned, bands))
        if settings.judge:
            verdict = judge(x, look.course or (bearings,), responses, rows, frequencies_hz, bands)
    carried = None if refined is None else independent_start(refined.matrix[:, : refined.talkers])
    if verdict is not None and not verdict.helps:
        return ChainResult(None, carried, responses, refined, verdict, np.zeros((len(STAGES), model_rows.shape[1])))
    talkers, shares = _finished(x, z, steps, settings, reference, bands)
    return ChainResult(talkers, carried, responses, refined, verdict, shares)


def _finished(
    x: Complexes, z: Complexes, steps: list[Complexes], settings: RoomSettings, reference: int, bands: Bands
) -> tuple[Complexes, Reals]:
    """The talkers by the last matrix and the post stage; energy of what each stage has changed, (stages, K)."""
    f, k, _ = steps[0].shape
    talkers = np.empty((f, k, x.shape[2]), x.dtype)

    def finish(b: slice) -> Reals:
        outputs: list[Complexes] = [steps[0][b] @ x[b], *(rows[b] @ z[b] for rows in steps)]
        names = list(STAGES[: len(steps)])
        if settings.post is not None:
            filtered, early = _post(
                x[b], z[b], steps[-1][b], outputs[-1], settings.post, settings.prediction, reference
            )
            outputs.extend((filtered, early))
            names += STAGES[3:]
        talkers[b] = outputs[-1]
        changed = np.zeros((len(STAGES), k))
        for name, (before, after) in zip(names, pairwise(outputs), strict=True):
            changed[STAGES.index(name)] = power(after - before).sum(axis=(0, 2))
        return changed

    return talkers, np.asarray(sum(bands.each(finish)))


def _constrained(z: Complexes, responses: Complexes, settings: LearnedSettings, bands: Bands) -> Complexes:
    """Rows (frequencies, K, M) of the constrained solve with learned responses."""

    def solve(b: slice) -> Complexes:
        a = responses[b]
        if settings.noise == "white":
            left = adjoint(a)
        else:
            left = adjoint(safe_solve(loaded(z[b] @ adjoint(z[b]), settings.loading), a))
        return safe_solve(loaded(left @ a, settings.prior_weight), left)

    return np.concatenate(bands.each(solve))


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
