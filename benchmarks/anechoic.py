"""Without reverberation: quality of the delay model beside the baselines and beside what its singular values allow."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from common import PUCK, TABLE_SEEDS, VOICES, Case, Floats, circle, print_table
from marks import multichannel_wiener, ratio_mask

from unmix.jobs.grade import grade
from unmix.jobs.solve import paths_of, solve
from unmix.metrics.distortion import FILTER_LENGTH
from unmix.model.delays import Paths
from unmix.render.compose import RenderedScene
from unmix.scene import Scene
from unmix.solvers.assemble import assemble
from unmix.variant import PRESETS

VARIANTS = ("reference-mic", "delay-and-sum", "minimum-variance", "linear-constraint", "model")


def cases() -> Iterable[Case]:
    """The rows of the table; other speech, bearings and seeds than those used while developing."""
    rng = np.random.default_rng(TABLE_SEEDS[0])
    for label, array, rate, bearings in (
        ("2 talkers, 75 deg", PUCK, 16000, (0.0, 75.0)),
        ("2 talkers, 75 deg", PUCK, 16000, (0.0, 75.0)),
        ("3 talkers", PUCK, 16000, (0.0, 80.0, 195.0)),
        ("3 talkers", PUCK, 16000, (0.0, 100.0, 210.0)),
        ("2 talkers, 48 kHz", PUCK, 48000, (0.0, 75.0)),
        ("2 talkers, 15 cm array", circle(6, 0.15, centre=True), 16000, (0.0, 75.0)),
        ("2 talkers, 4 mics, 2 cm radius", circle(4, 0.02, centre=False), 16000, (0.0, 75.0)),
        ("2 talkers, 25 deg", PUCK, 16000, (0.0, 25.0)),
    ):
        turn = float(rng.uniform(-180, 180))
        voices = tuple(str(v) for v in rng.choice(VOICES, len(bearings), replace=False))
        azimuths = tuple((b + turn + 180.0) % 360.0 - 180.0 for b in bearings)
        yield Case(label, azimuths, voices, array, sample_rate=rate, seed=int(rng.integers(4001, 4099)))


def allowed_db(rendered: RenderedScene, scene: Scene) -> tuple[Floats, Floats]:
    """SDR and SIR that the singular values allow each talker.

    Noise at the output is the microphones' noise times the filters' gain; the SDR ends there. The ruler allows
    `FILTER_LENGTH` taps of each other reference, so noise alone gives an SIR of
    SDR + 10 log10(samples / (taps (K - 1))).
    """
    paths: Paths = paths_of(scene, PRESETS["model"])
    bank = assemble(PRESETS["model"], paths, scene.array, sample_rate=scene.sample_rate).bank
    assert bank is not None
    noise_power = rendered.noise.var(axis=1).mean() * np.sum(bank.taps**2, axis=(1, 2))
    sdr = 10 * np.log10(rendered.image.var(axis=1) / noise_power)
    k, samples = rendered.image.shape
    return sdr, sdr + 10 * np.log10(samples / (FILTER_LENGTH * (k - 1)))


def leakage_db(rendered: RenderedScene, scene: Scene) -> float:
    """The worst talker's: what comes out for it when another one speaks alone, relative to its own."""
    worst = -np.inf
    outputs = [
        solve(
            Scene.from_arrays(image + 1e-9, scene.array, scene.talkers, sample_rate=scene.sample_rate), "model"
        ).signals
        for image in rendered.images
    ]
    for k, wanted in enumerate(outputs):
        for j, other in enumerate(outputs):
            if j != k:
                worst = max(worst, 10 * np.log10(np.var(other[k]) / np.var(wanted[k])))
    return float(worst)


def main() -> None:
    """Print the table."""
    rows = []
    for case in cases():
        rendered = case.render()
        scene = case.scene(rendered)
        truth = rendered.image
        sdr, sir = allowed_db(rendered, scene)
        for name in VARIANTS:
            signals = solve(scene, name).signals
            assert signals is not None
            allowed = (sdr.min(), sir.min(), leakage_db(rendered, scene)) if name == "model" else (None,) * 3
            rows.append([case.label, name, *_figures(signals, truth, case.sample_rate), *allowed])
        knowing = {
            "knowing the truth: ratio mask": ratio_mask(rendered.mixture[rendered.array.reference_channel], truth),
            "knowing the truth: Wiener": multichannel_wiener(rendered.mixture, truth),
        }
        rows += [[case.label, n, *_figures(s, truth, case.sample_rate), None, None, None] for n, s in knowing.items()]
    print_table(
        "Anechoic, 10 s, talkers at 1.2 m, 30 dB above each microphone's noise: the worst talker of each case",
        ["case", "variant", "SDR, dB", "SIR, dB", "STOI", "SDR allowed, dB", "SIR allowed, dB", "leakage, dB"],
        rows,
    )


def _figures(signals: Floats, truth: Floats, rate: int) -> tuple[float, float, float]:
    grades = grade(signals, truth, sample_rate=rate, match="name", speech=False)
    return tuple(min(getattr(t, f) for t in grades.talkers) for f in ("sdr_db", "sir_db", "stoi"))  # type: ignore[return-value]


__all__ = ["allowed_db", "main"]

if __name__ == "__main__":
    main()
