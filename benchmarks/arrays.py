"""Tables on knowing the array: predicted against rendered, calibration, health check, a measured head.

Scenes are drawn from the tables' seeds. What is measured:

    limits     output SNR predicted from array and bearings beside that of a rendered separation
    calibrate  SIR with the faults unknown, calibrated and absent; normalised errors of what calibration states
    check      faults found and false alarms over arrays and rooms, and the speed
    head       two talkers at the two ears of the KEMAR set of Gardner and Martin (1995), where it is installed
"""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
from common import TABLE_SEEDS, Floats, circle, clip, print_table
from scipy.signal import fftconvolve

from unmix.array import Array
from unmix.audio import resample
from unmix.errors import UnsolvableError
from unmix.jobs.calibrate import calibrate
from unmix.jobs.check import check
from unmix.jobs.grade import grade
from unmix.jobs.solve import solve
from unmix.limits.ladder import noise_gain, responses
from unmix.limits.shapes import make_shape
from unmix.metrics.leakage import leakage_of_outputs_db
from unmix.render.compose import render_scene
from unmix.render.spec import ArraySpec, FaultSpec, NoiseSpec, RenderSpec, RoomSpec, TalkerSpec
from unmix.scene import Scene, Talker
from unmix.variant import load_variant

RATE = 16000
KEMAR = Path("/usr/share/libmysofa/MIT_KEMAR_normal_pinna.sofa")
PUCK = circle(6, 0.04, centre=True)
ARRAYS = {
    "puck": PUCK,
    "line of 4, 15 cm": make_shape("line", 4, 0.15),
    "pair, 10 cm": make_shape("line", 2, 0.1),
    "two pairs at a head": make_shape("head pairs", 4, 0.012),
    "table ring, 1 m": make_shape("circle", 6, 1.0),
}


def rendered(
    array: Array,
    azimuths_deg: tuple[float, ...],
    *,
    seed: int,
    seconds: float = 6.0,
    t20_s: float | None = None,
    faults: FaultSpec | None = None,
    snr_db: float = 30.0,
    elevations_deg: tuple[float, ...] | None = None,
) -> tuple[Scene, Floats]:
    """A scene with the array as believed, and each talker's image as recorded."""
    voices = ("novel-reader", "card-reader", "digits")[: len(azimuths_deg)]
    clips = {v: clip(v, seconds, RATE) for v in voices}
    clips = {v: c - c.mean() for v, c in clips.items()}  # an offset of the clip is none of the channels'
    heights = elevations_deg or (0.0,) * len(azimuths_deg)
    spec = RenderSpec(
        duration_s=seconds,
        seed=seed,
        room=None if t20_s is None else RoomSpec(size_m=[6.5, 5.0, 2.8], t20_s=t20_s),
        array=ArraySpec(positions_m=array.positions_m.tolist(), reference_channel=array.reference_channel),
        talker=[
            TalkerSpec(name=v, azimuth_deg=a, elevation_deg=e, distance_m=1.2, level_db=-30.0)
            for v, a, e in zip(voices, azimuths_deg, heights, strict=True)
        ],
        noise=NoiseSpec(sensor_snr_db=snr_db),
        faults=faults or FaultSpec(),
    )
    made = render_scene(spec, clips=clips)
    talkers = [
        Talker(v, float(np.radians(a)), float(np.radians(e)), 1.2)
        for v, a, e in zip(voices, azimuths_deg, heights, strict=True)
    ]
    return Scene.from_arrays(made.mixture, array, talkers, sample_rate=RATE), made.images


def predictions() -> None:
    """Ten random arrays of 3 to 7 microphones in a cube of 10 cm, noise and talkers separated apart."""
    differences = []
    for seed in TABLE_SEEDS[:10]:
        rng = np.random.default_rng(seed)
        array = Array.from_positions(rng.uniform(-0.05, 0.05, (int(rng.integers(3, 8)), 3)))
        first = rng.uniform(-180.0, 180.0)
        azimuths = np.radians([first, first + rng.uniform(20.0, 180.0)])
        placed = [Talker(n, float(a)) for n, a in zip("ab", azimuths, strict=True)]
        noise = rng.standard_normal((array.channels, 8 * RATE))
        variant = load_variant("model")
        out = solve(Scene.from_arrays(0.05 * noise, array, placed, sample_rate=RATE), variant).signals
        f = np.linspace(100.0, 7200.0, 1000)
        gain = noise_gain(
            responses(array, azimuths[None], f)[0], np.full(1000, variant.solver.prior_weight * array.channels)
        )
        spectrum = np.abs(np.fft.rfft(out[:, 4000:-4000])) ** 2
        at = np.fft.rfftfreq(out.shape[1] - 8000, 1.0 / RATE)
        chosen = (at >= 100.0) & (at <= 7200.0)
        heard = np.abs(np.fft.rfft(0.05 * noise[0, 4000:-4000])) ** 2
        measured = spectrum[:, chosen].sum(axis=1) / heard[chosen].sum()
        differences += (10 * np.log10(gain.mean(axis=0) / measured)).tolist()
    print_table(
        "Noise gain predicted by `limits` less rendered, ten random arrays, 100 Hz to 7.2 kHz",
        ["mean, dB", "RMS, dB", "largest, dB"],
        [[float(np.mean(differences)), float(np.std(differences)), float(np.abs(differences).max())]],
    )


def sir_db(believed: Array, seed: int, faults: FaultSpec) -> tuple[float, float]:
    """Worst talker's SIR with `believed` in the model: graded at 20 dB of noise, and by leakage through the filters."""
    scene, images = rendered(PUCK, (20.0, 95.0), seed=seed, faults=faults, snr_db=20.0)

    def solved(samples: Floats) -> Floats:
        return solve(Scene.from_arrays(samples, believed, scene.talkers, sample_rate=RATE), "model").signals

    grades = grade(solved(scene.recording.read()), images[:, 0], sample_rate=RATE, names=["a", "b"])
    leakage = leakage_of_outputs_db(np.array([solved(image) for image in images]))
    return min(t.sir_db for t in grades.talkers), float(-np.nanmax(leakage))


def calibrations() -> None:
    """2 dB and 20 us, with and without 2 mm, takes of 4 s at 20 dB."""
    rows = []
    for positions in (False, True):
        bearings = [(20.0, 0.0), (100.0, 0.0), (190.0, 0.0), (280.0, 0.0), (60.0, 65.0)] if positions else [(20.0, 0.0)]
        sir: dict[str, list[tuple[float, float]]] = {"faultless": [], "faulty": [], "calibrated": []}
        z_gain, z_delay, z_place = [], [], []
        for seed in TABLE_SEEDS[:6]:
            rng = np.random.default_rng(seed)
            gain, delay = 2.0 * rng.standard_normal(7), 20e-6 * rng.standard_normal(7)
            place = (2e-3 if positions else 0.0) * rng.standard_normal((7, 3))
            faults = FaultSpec(gain_db=gain.tolist(), delay_s=delay.tolist(), position_m=place.tolist())
            takes = [
                rendered(PUCK, (a,), seed=seed + k, seconds=4.0, faults=faults, snr_db=20.0, elevations_deg=(e,))[0]
                for k, (a, e) in enumerate(bearings)
            ]
            found = calibrate(takes, positions=positions).array
            sir["faultless"].append(sir_db(PUCK, seed, FaultSpec()))
            sir["faulty"].append(sir_db(PUCK, seed, faults))
            sir["calibrated"].append(sir_db(found, seed, faults))
            z_gain += ((found.gain_db - gain + gain[0]) / found.gain_std_db)[1:].tolist()
            z_delay += ((found.delay_s - delay + delay[0]) / found.delay_std_s)[1:].tolist()
            if positions:
                off = found.positions_m - PUCK.positions_m - place + place[0]
                z_place += (off[1:] / found.position_std_m[1:, None]).ravel().tolist()
        rows.append(
            [
                "2 dB, 20 us, 2 mm; five takes" if positions else "2 dB, 20 us; one take",
                *(float(np.mean(v, axis=0)[0]) for v in sir.values()),
                float(np.max(np.subtract(sir["faultless"], sir["calibrated"])[:, 0])),
                *(float(np.mean(v, axis=0)[1]) for v in sir.values()),
                *(float(np.sqrt(np.mean(np.square(z)))) if z else None for z in (z_gain, z_delay, z_place)),
            ]
        )
    print_table(
        "Calibration, puck of seven, talkers 75 degrees apart, six arrays: SIR of the worse talker in dB, graded at "
        "20 dB of noise and by leakage without noise; normalised errors",
        [
            "faults",
            "SIR faultless",
            "faulty",
            "calibrated",
            "largest loss",
            "leakage: faultless",
            "faulty",
            "calibrated",
            "z gain",
            "z delay",
            "z position",
        ],
        rows,
    )


def _swap(y: Floats, rng: np.random.Generator) -> Floats:
    a, b = rng.choice(len(y), 2, replace=False)
    y[[a, b]] = y[[b, a]]
    return y


def _turn(y: Floats, rng: np.random.Generator) -> Floats:
    y[rng.integers(1, len(y))] *= -1.0
    return y


def _late(y: Floats, rng: np.random.Generator) -> Floats:
    m = rng.integers(1, len(y))
    y[m] = np.roll(y[m], int(rng.integers(200, 2000)))
    return y


def _drop(y: Floats, rng: np.random.Generator) -> Floats:
    at = int(rng.integers(RATE, y.shape[1] - RATE))
    y[rng.integers(len(y)), at : at + 160] = 0.0
    return y


def _quiet(y: Floats, rng: np.random.Generator) -> Floats:
    y[rng.integers(len(y))] *= 10 ** (-4.0 / 20)
    return y


FAULTS: dict[str, Callable[[Floats, np.random.Generator], Floats]] = {
    "polarity": _turn,
    "order": _swap,
    "delay": _late,
    "dropouts": _drop,
    "gain": _quiet,
}


def checks() -> None:
    """Each array in eight scenes: no room and T20 0.2 to 0.6 s; one fault at a time."""
    rows = []
    for name, array in ARRAYS.items():
        found = dict.fromkeys(FAULTS, 0)
        alarms = scenes = 0
        for seed in TABLE_SEEDS[:8]:
            rng = np.random.default_rng([seed, array.channels])
            t20 = (None, 0.2, 0.4, 0.6)[seed % 4]
            first = rng.uniform(-180.0, 180.0)
            scene, _ = rendered(array, (first, first + rng.uniform(40.0, 180.0)), seed=seed, seconds=8.0, t20_s=t20)
            samples = scene.recording.read()
            scenes += 1
            alarms += sum(f.severity != "note" and f.kind != "resolution" for f in check(scene).findings)
            for kind, change in FAULTS.items():
                bad = Scene.from_arrays(change(samples.copy(), rng), array, scene.talkers, sample_rate=RATE)
                found[kind] += any(f.kind == kind and f.severity != "note" for f in check(bad).findings)
        rows.append([name, f"{alarms} in {scenes}", *(f"{n} of {scenes}" for n in found.values())])
    print_table("Health check: false alarms, and faults found", ["array", "false alarms", *FAULTS], rows)
    _speed()


def _speed() -> None:
    rng = np.random.default_rng(1)
    rows = []
    for channels, rate, seconds in ((7, 16000, 120), (7, 48000, 60), (16, 48000, 60)):
        array = circle(channels - 1, 0.05, centre=True)
        voice = clip("novel-reader", seconds, rate)
        samples = voice + 1e-4 * rng.standard_normal((channels, len(voice)))
        scene = Scene.from_arrays(samples, array, sample_rate=rate)
        began = time.perf_counter()
        check(scene)
        rows.append([channels, rate, seconds, seconds / (time.perf_counter() - began)])
    print_table("Health check: speed", ["channels", "rate, Hz", "seconds", "times real time"], rows)


def head() -> None:
    """Two talkers, two ears, no room."""
    if not KEMAR.exists():
        print("\n(no measured head installed: libmysofa1)")
        return
    measured = Array.load(KEMAR)
    free = Array.from_positions(measured.positions_m)
    rows = []
    for pair in ((40.0, -50.0), (15.0, -15.0), (90.0, 20.0), (30.0, 150.0)):
        images = []
        for voice, azimuth in zip(("novel-reader", "card-reader"), pair, strict=True):
            at = measured.responses.nearest(float(np.radians(azimuth)), 0.0)[0]
            dry = clip(voice, 6.0, 44100)
            heard = fftconvolve(np.broadcast_to(dry, (2, len(dry))), measured.responses.taps[at], axes=1)
            images.append(resample(heard, 44100, RATE)[:, : 6 * RATE])
        images = 0.05 * np.array(images) / np.std(images)
        mixture = images.sum(axis=0) + 5e-4 * np.random.default_rng(7).standard_normal(images.shape[1:])
        row: list[object] = [f"{pair[0]:.0f} and {pair[1]:.0f} deg"]
        for array in (measured, free):
            talkers = [Talker.at(n, a) for n, a in zip("ab", pair, strict=True)]
            try:
                signals = solve(Scene.from_arrays(mixture, array, talkers, sample_rate=RATE), "model").signals
            except UnsolvableError:  # front and back of two microphones in free air
                row += [None, None]
                continue
            grades = grade(signals, images[:, 0], sample_rate=RATE, unprocessed=mixture[0], names=["a", "b"])
            row += [min(t.sir_db for t in grades.talkers), min(t.sdr_db for t in grades.talkers)]
        rows.append([*row, min(t.unprocessed.sir_db for t in grades.talkers)])
    print_table(
        "Two talkers at two ears (KEMAR), 40 dB over the noise: worse talker, dB",
        ["talkers", "SIR, measured responses", "SDR", "SIR, positions alone", "SDR", "SIR unprocessed"],
        rows,
    )


def main() -> None:
    """All tables on the array."""
    predictions()
    calibrations()
    checks()
    head()


if __name__ == "__main__":
    main()
