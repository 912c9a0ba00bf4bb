"""How fast and how large: ratios measured in one run, one core (set OPENBLAS_NUM_THREADS=1)."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np
from common import PUCK, clip, print_table, timed

from unmix.jobs.solve import solve
from unmix.model.delays import paths_from_bearings
from unmix.model.differentiators import choose_differentiators
from unmix.model.mixing import mixing_from_paths
from unmix.model.noise import Noise
from unmix.model.prior import make_prior
from unmix.scene import Scene, Talker
from unmix.solvers import reduced
from unmix.solvers.convex import ConvexBlock
from unmix.solvers.problem import Problem
from unmix.track import Track
from unmix.variant import PRESETS

RATE = 16000
BEARINGS = np.radians([20.0, 95.0])


def recording(seconds: float) -> np.ndarray:
    """Two voices and noise at seven microphones; only the size matters here."""
    rng = np.random.default_rng(5)
    voices = clip("novel-reader", seconds, RATE) + clip("card-reader", seconds, RATE)
    return np.asarray(0.1 * voices + 1e-3 * rng.standard_normal((7, len(voices))))


def at_rest() -> list[Talker]:
    return [Talker(str(i), float(b), 0.0, 1.2) for i, b in enumerate(BEARINGS)]


def stationary() -> list[object]:
    """A minute through the filter bank, design included."""
    scene = Scene.from_arrays(recording(60.0), PUCK, at_rest(), sample_rate=RATE)
    seconds, _ = timed(lambda: solve(scene, "model"))
    return ["`stationary`, 60 s, 7 microphones, 2 talkers", f"{seconds:.2f} s", f"{60 / seconds:.0f} x real time"]


def moving() -> list[object]:
    """Ten seconds with a walking talker through banded Cholesky."""
    import warnings

    time_s = np.linspace(0.0, 10.0, 101)
    walk = Track(time_s, np.radians(20 + 9 * time_s), 0 * time_s, 0 * time_s + 1.2)
    talkers = [Talker("a", track=walk), Talker("b", -1.0, 0.0, 1.2)]
    scene = Scene.from_arrays(recording(10.0), PUCK, talkers, sample_rate=RATE)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        seconds, _ = timed(lambda: solve(scene, "model"))
    return ["`reduced`, one talker walking, 10 s", f"{seconds:.2f} s", f"{10 / seconds:.1f} x real time"]


def against_convex() -> list[list[object]]:
    """One block of 1,024 samples: the same solution by three methods, and what a minute would cost by each."""
    paths = paths_from_bearings(PUCK, BEARINGS, 0.0, 1.2)
    chosen = choose_differentiators(8, family="least-squares", error_db=-60, band_edge=0.9)
    mixing = mixing_from_paths(paths, chosen, RATE)
    problem = Problem.of(mixing, Noise("white"), make_prior("flat", 1e-3, mixing, RATE))
    block = recording(1.0)[:, :1024]
    compiled = ConvexBlock(problem, 1024)
    factor = reduced.factorise(problem, 1024)
    slow, by_convex = timed(lambda: compiled.solve(block), repeats=5)
    fast, by_factor = timed(lambda: factor.solve(block), repeats=20)
    scene = Scene.from_arrays(recording(60.0), PUCK, at_rest(), sample_rate=RATE)
    minute, _ = timed(lambda: solve(scene, "model"))
    difference = np.abs(by_convex - by_factor).max() / np.abs(by_factor).max()
    return [
        ["`convex`, one block of 1,024", f"{slow * 1e3:.0f} ms", f"{1.024 / 16 / slow:.1f} x real time"],
        ["`reduced` with a cached factor, the same block", f"{fast * 1e3:.2f} ms", f"{slow / fast:.0f} x `convex`"],
        ["largest difference of the two, relative", f"{difference:.1e}", ""],
        ["`stationary` over `convex`, per second of recording", "", f"{slow / (1024 / RATE) / (minute / 60):.0f} x"],
    ]


_HOUR = """
import sys, warnings
from pathlib import Path
import numpy as np
from unmix.jobs.solve import solve_to_folder
from unmix.scene import Scene
warnings.simplefilter("ignore")
solve_to_folder(Scene.load(sys.argv[1]), sys.argv[2], sys.argv[3])
# The kernel's own high-water mark of this process; what getrusage reports starts with the parent's at the fork.
status = Path("/proc/self/status").read_text().split()
print(int(status[status.index("VmHWM:") + 1]) // 1024)
"""


def memory(variant: str) -> list[object]:
    """Peak memory of a process that solves an hour of seven channels."""
    from unmix.audio import AudioWriter

    with tempfile.TemporaryDirectory() as folder:
        place = Path(folder)
        minute = recording(60.0)
        with AudioWriter(place / "mix.wav", RATE, 7, expect=3600 * RATE) as writer:
            for _ in range(60):
                writer.write(minute)
        talkers = "".join(
            f'[[talker]]\nname = "t{i}"\nazimuth_deg = {np.degrees(b)}\ndistance_m = 1.2\n'
            for i, b in enumerate(BEARINGS)
        )
        text = f'[recording]\nfile = "mix.wav"\n[array]\npositions_m = {PUCK.positions_m.tolist()}\n{talkers}'
        (place / "scene.toml").write_text(text)
        environment = {**os.environ, "OPENBLAS_NUM_THREADS": "1"}
        command = [sys.executable, "-c", _HOUR, str(place / "scene.toml"), str(place / "out"), variant]
        seconds, done = timed(
            lambda: subprocess.run(command, capture_output=True, text=True, check=True, env=environment), repeats=1
        )
    return [f"`{variant}`, one hour, 7 channels, to files", f"{seconds:.0f} s", f"peak {int(done.stdout):,} MB"]


def main() -> None:
    """Print the table."""
    rows = [stationary(), moving(), *against_convex()]
    rows += [memory(v) for v in ("model", "full") if v in PRESETS]
    print_table(f"Speed and size ({os.cpu_count()} cores, one used)", ["case", "time", "figure"], rows)


if __name__ == "__main__":
    main()
