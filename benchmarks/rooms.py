"""In rooms: every preset beside the baselines, a general-purpose peer and the marks that know the truth.

Real speech, 15 s, 30 dB above each microphone's noise, bearings given, reverberation time measured on the responses
(T20), references cut 50 ms after the direct sound. Means over scenes and talkers, with the spread over scenes.
"""

from __future__ import annotations

import argparse
import time
import warnings
from collections.abc import Sequence

import numpy as np
from common import PUCK, TABLE_SEEDS, Case, Floats, circle, drawn_cases, line, print_table
from marks import multichannel_wiener, ratio_mask
from scipy.signal import ShortTimeFFT
from scipy.signal.windows import hann

from unmix.array import Array
from unmix.jobs.grade import grade
from unmix.jobs.solve import solve
from unmix.render.compose import RenderedScene
from unmix.variant import PRESETS

ROWS = ((2, 0.2), (2, 0.4), (2, 0.6), (3, 0.4), (3, 0.6))
OTHER_ARRAYS = (("4 mics, 3 cm circle", circle(4, 0.03, centre=False)), ("5 mics, 20 cm line", line(5, 0.20)))


def peer(rendered: RenderedScene) -> Floats:
    """scikit-learn's FastICA on each frequency, components put to the talkers by the truth (which flatters it)."""
    from sklearn.decomposition import FastICA
    from sklearn.exceptions import ConvergenceWarning

    stft = ShortTimeFFT(hann(1024, sym=False), 256, fs=1.0)
    y = stft.stft(rendered.mixture).transpose(1, 0, 2)
    truth = stft.stft(rendered.early).transpose(1, 0, 2)
    k = truth.shape[1]
    out = np.zeros((k, y.shape[0], y.shape[2]), complex)
    for f in range(1, y.shape[0]):
        u, s, _ = np.linalg.svd(y[f], full_matrices=False)
        x = (u[:, :k].conj().T @ y[f]) / (s[:k, None] + 1e-12)
        # FastICA takes real data: real and imaginary parts are two draws of the same mixing.
        ica = FastICA(k, whiten="unit-variance", random_state=0, max_iter=100)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", ConvergenceWarning)
            ica.fit(np.concatenate([x.real, x.imag], axis=1).T)
        z = ica.components_ @ x
        mixing = y[f, rendered.array.reference_channel] @ z.conj().T
        mixing = mixing / np.maximum(np.sum(np.abs(z) ** 2, axis=1), 1e-12)
        z = mixing[:, None] * z
        fit = np.abs(z @ truth[f].conj().T)
        for _ in range(k):
            i, j = np.unravel_index(int(np.argmax(fit)), fit.shape)
            out[j, f] = z[i]
            fit[i], fit[:, j] = -1.0, -1.0
    return np.asarray(stft.istft(out, k1=rendered.mixture.shape[1]))


def figures(signals: Floats, rendered: RenderedScene) -> np.ndarray:
    """SIR, STOI, SDR and ESTOI against the early references: (talkers, 4)."""
    grades = grade(signals, rendered.early, sample_rate=rendered.sample_rate, match="name", speech=False)
    return np.array([[t.sir_db, t.stoi, t.sdr_db, t.estoi] for t in grades.talkers], dtype=float)


def one_scene(
    case: Case, variants: Sequence[str], *, marks: bool = True
) -> tuple[dict[str, np.ndarray], RenderedScene]:
    """Figures of every variant on one scene."""
    rendered = case.render()
    scene = case.scene(rendered)
    found = {}
    for name in variants:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            solution = solve(scene, name)
        assert solution.signals is not None
        found[name] = figures(solution.signals, rendered)
    if marks:
        reference = rendered.mixture[rendered.array.reference_channel]
        found["FastICA per frequency"] = figures(peer(rendered), rendered)
        found["knowing the truth: ratio mask"] = figures(ratio_mask(reference, rendered.early), rendered)
        found["knowing the truth: Wiener"] = figures(multichannel_wiener(rendered.mixture, rendered.early), rendered)
    return found, rendered


def table(
    label: str, talkers: int, t20_s: float, seeds: Sequence[int], variants: Sequence[str], array: Array = PUCK
) -> list[list[object]]:
    """Rows of one line of the table."""
    everything: dict[str, list[np.ndarray]] = {}
    t20, drr = [], []
    for case in drawn_cases(label, talkers, t20_s, seeds, array=array):
        found, rendered = one_scene(case, variants)
        t20 += [t for t in rendered.t20_s if t is not None]
        drr += [d for d in rendered.drr_db if d is not None]
        for name, values in found.items():
            everything.setdefault(name, []).append(values)
    rows: list[list[object]] = []
    before = everything["reference-mic"]
    for name, scenes in everything.items():
        means = np.array([s.mean(axis=0) for s in scenes])
        worst = min(float((s[:, 1] - b[:, 1]).min()) for s, b in zip(scenes, before, strict=True))
        mean, spread = means.mean(axis=0), means.std(axis=0, ddof=1) if len(means) > 1 else np.zeros(4)
        rows.append(
            [label, f"{np.mean(t20):.2f} s", f"{np.mean(drr):.1f} dB", name, f"{mean[0]:.1f} ({spread[0]:.1f})",
             f"{mean[1]:.3f} ({spread[1]:.3f})", f"{mean[2]:.1f} ({spread[2]:.1f})", f"{mean[3]:.3f}",
             f"{worst:+.3f}"]
        )  # fmt: skip
    return rows


def main(argv: Sequence[str] | None = None) -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--scenes", type=int, default=6)
    parser.add_argument("--first-seed", type=int, default=TABLE_SEEDS[0])
    parser.add_argument("--rows", nargs="*", type=int, default=list(range(len(ROWS))))
    parser.add_argument("--variants", nargs="*", default=list(PRESETS))
    parser.add_argument("--other-arrays", action="store_true")
    options = parser.parse_args(argv)
    began = time.perf_counter()
    seeds = range(options.first_seed, options.first_seed + options.scenes)
    columns = ["talkers", "T20", "DRR", "variant", "SIR, dB", "STOI", "SDR, dB", "ESTOI", "worst STOI gain"]
    rows = []
    for index in options.rows:
        talkers, t20_s = ROWS[index]
        rows += table(f"{talkers}, {t20_s:g} s", talkers, t20_s, seeds, options.variants)
    print_table(f"Rooms, 7 microphones, {options.scenes} scenes a row: mean (spread over scenes)", columns, rows)
    if options.other_arrays:
        rows = []
        for label, array in OTHER_ARRAYS:
            rows += table(label, 2, 0.4, seeds, options.variants, array)
        print_table("Other arrays, 2 talkers, 0.4 s", columns, rows)
    print(f"\n{time.perf_counter() - began:.0f} s")


if __name__ == "__main__":
    main()
