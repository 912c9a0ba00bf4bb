"""Every quality and speed table in one run; `README.md` beside this file keeps the last one.

python benchmarks/tables.py                     # everything, about twenty minutes on two cores
python benchmarks/tables.py --only anechoic     # one of the names below
"""

from __future__ import annotations

import argparse
import importlib
import os
import platform
import sys
import time
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
sys.path.insert(0, str(Path(__file__).parent))

TABLES = {
    "anechoic": "the delay model without reverberation, beside what its singular values allow",
    "rooms": "every preset in rooms, beside the baselines and the marks that know the truth",
    "verdict": "how often the room stage is right about whether it helps",
    "bearings": "finding, counting and following talkers, beside the Cramer-Rao bound",
    "arrays": "knowing the array: limits, calibration, health check, a measured head",
    "speed": "how fast and how large",
    "live": "running live and exported filters: cost, latency, memory over an hour, word lengths",
    "grading_speed": "grading beside a general library",
    "real": "figures for real recordings beside the true ones",
    "batch": "24 scenes x 8 variants, killed and resumed; two workers over one; a million items (hours)",
}
LONG = ("batch",)
"""Run only when asked for."""


def main() -> None:
    """Print the tables asked for."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--only", nargs="*", choices=list(TABLES), default=[t for t in TABLES if t not in LONG])
    options = parser.parse_args()
    print(f"{os.cpu_count()} cores, Python {platform.python_version()}, BLAS threads: 1")
    for name in options.only:
        began = time.perf_counter()
        module = importlib.import_module(name)
        sys.argv = [name]
        module.main()
        print(f"\n({name}: {time.perf_counter() - began:.0f} s)", flush=True)


if __name__ == "__main__":
    main()
