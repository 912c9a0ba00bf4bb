"""How often the room stage's own verdict, which sees no reference, is right.

    python benchmarks/verdict.py [--scenes 8]

Two figures are judged against the truth of rendered scenes (7 microphones, real speech, two and three talkers, seats,
voices and rooms drawn from seeds that the limits were not chosen on):

- *The model alone is better*: true where the whole chain, left unjudged, loses more than 0.01 of mean STOI against the
  model alone, false where it gains more than that. What lies between is counted apart: either answer is as good.
- *Somebody speaks whom the scene does not name*: true where the last talker was left out of the scene.

Hits are the share of true cases that were named, false alarms the share of the others.
"""

from __future__ import annotations

import argparse
import warnings
from collections.abc import Iterator
from dataclasses import replace

import numpy as np
from common import TABLE_SEEDS, Case, drawn_cases, print_table

from unmix.jobs.grade import grade
from unmix.jobs.solve import solve
from unmix.render.compose import RenderedScene
from unmix.scene import Scene
from unmix.settings import RoomSettings
from unmix.variant import Variant

UNJUDGED = Variant(name="unjudged", room=RoomSettings(judge=False))


def cases(seed: int) -> Iterator[tuple[str, Case, int]]:
    """Label, scene, and how many talkers are left out."""
    for talkers in (2, 3):
        room = next(iter(drawn_cases("verdict", talkers, 0.4, [seed])))
        for label, changes in (
            ("no room", {"t20_s": None}),
            ("no room, 50 dB", {"t20_s": None, "snr_db": 50.0}),
            ("no room, 15 dB", {"t20_s": None, "snr_db": 15.0}),
            ("0.12 s", {"t20_s": 0.12}),
            ("0.4 s", {}),
            ("0.4 s, 10 dB", {"snr_db": 10.0}),
            ("1.2 s", {"t20_s": 1.2}),
            ("0.4 s, 3 s long", {"seconds": 3.0}),
        ):
            yield f"{talkers} talkers, {label}", replace(room, **changes), 0
        if talkers == 3:
            yield "3 talkers, one not named, 0.4 s", room, 1
            yield "3 talkers, one not named, 0.2 s", replace(room, t20_s=0.2), 1
            yield "3 talkers, one not named, no room", replace(room, t20_s=None), 1


def mean_stoi(signals: np.ndarray, rendered: RenderedScene) -> float:
    """Against the early references."""
    grades = grade(
        signals, rendered.early[: len(signals)], sample_rate=rendered.sample_rate, match="name", speech=False
    )
    return float(np.mean([t.stoi for t in grades.talkers if t.stoi is not None]))


def main() -> None:
    """Print the rates and where they come from."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--scenes", type=int, default=8)
    options = parser.parse_args()
    rows: dict[str, list[tuple[float, bool, float, bool, float]]] = {}
    for seed in TABLE_SEEDS[: options.scenes]:
        for label, case, dropped in cases(seed):
            rendered = case.render()
            scene = case.scene(rendered)
            if dropped:
                kept = list(scene.talkers)[:-dropped]
                scene = Scene.from_arrays(rendered.mixture, rendered.array, kept, sample_rate=case.sample_rate)
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                judged, chain, model = (solve(scene, v) for v in ("full", UNJUDGED, "model"))
            assert chain.signals is not None
            assert model.signals is not None
            gain = mean_stoi(chain.signals, rendered) - mean_stoi(model.signals, rendered)
            segment = judged.details["room"]["segments"][0]
            rows.setdefault(label, []).append(
                (
                    gain,
                    segment["fallback"] == "model",
                    segment["fit_gain_db"],
                    any("somebody else speaks" in w for w in judged.warnings),
                    segment["stranger"],
                )
            )
    table = []
    for label, found in rows.items():
        gain, model, fit, named, strange = (np.array(v) for v in zip(*found, strict=True))
        table.append(
            [label, f"{gain.mean():+.3f}", f"{model.sum()} of {len(model)}", f"{fit.min():.2f} to {fit.max():.2f}",
             f"{named.sum()} of {len(named)}", f"{strange.min():.2f} to {strange.max():.2f}"]
        )  # fmt: skip
    columns = ["scenes", "STOI, chain over model", "fell back", "fit gain, dB", "stranger named", "its share"]
    print_table(f"The room stage's verdict, {options.scenes} scenes a row", columns, table)
    everything = [(label, *f) for label, found in rows.items() for f in found]
    worse = [f[2] for f in everything if f[1] < -0.01]
    even = [f[2] for f in everything if abs(f[1]) <= 0.01]
    better = [f[2] for f in everything if f[1] > 0.01]
    stranger = [f[4] for f in everything if "not named" in f[0]]
    known = [f[4] for f in everything if "not named" not in f[0]]
    print_table(
        "Rates",
        ["verdict", "hits", "false alarms", "said where both are as good"],
        [
            ["the model alone is better", rate(worse), rate(better), rate(even)],
            ["somebody speaks who is not named", rate(stranger), rate(known), ""],
        ],
    )


def rate(said: list[bool]) -> str:
    """As a share, with the count."""
    return f"{sum(said)} of {len(said)} ({100 * sum(said) / max(len(said), 1):.0f} %)"


if __name__ == "__main__":
    main()
