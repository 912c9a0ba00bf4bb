"""Finding, counting and following talkers, beside the Cramer-Rao bound.

    python benchmarks/bearings.py                           # all parts, about twelve minutes on two cores
    python benchmarks/bearings.py --only rest --scenes 20   # one of: bound rest methods moving turning separation speed

Seven microphones (six on a circle of 4 cm radius, one in the middle), real speech, 15 s, each talker at least 30 dB
above each microphone's noise, T20 as measured on the responses. Seats, rooms and voices are drawn from seeds nothing
was tuned on. A talker counts as found within 10 degrees; errors are those of the azimuth of talkers found. The bound
is that of the direct sound alone in the microphones' noise (deterministic signals, bearings in the plane): what no
room would allow.
"""

from __future__ import annotations

import argparse
import time
import warnings
from collections.abc import Callable, Sequence

import numpy as np
from common import PUCK, TABLE_SEEDS, VOICES, Case, Floats, clip, drawn_cases, print_table
from scipy.optimize import linear_sum_assignment
from scipy.spatial.transform import Rotation

from unmix.bearings.bound import bearing_bound, fisher_information
from unmix.bearings.fit import FrameCovariance, fit_bearings, steering_with_derivatives
from unmix.bearings.ospa import gospa, ospa
from unmix.bearings.space import search_space
from unmix.jobs.grade import grade
from unmix.jobs.locate import METHODS, locate_array
from unmix.jobs.located import Located
from unmix.jobs.solve import solve
from unmix.physics import speed_of_sound, unit_vector
from unmix.render.compose import RenderedScene, render_scene
from unmix.render.spec import ArraySpec, NoiseSpec, RenderSpec, RoomSpec, TalkerSpec
from unmix.track import Orientation, Track

RATE = 16000
FOUND_DEG = 10.0
ROWS = ((1, 0.4), (2, None), (3, None), (2, 0.2), (3, 0.2), (2, 0.4), (3, 0.4), (2, 0.6), (3, 0.6), (4, 0.4))


def apart_deg(a: Floats, b: Floats) -> Floats:
    """Angles between azimuths in radians, in degrees."""
    return np.asarray(np.degrees(np.abs(np.angle(np.exp(1j * (np.asarray(a) - np.asarray(b)))))))


def matched(located: Located, truth: Floats) -> tuple[Floats, Floats]:
    """Azimuth errors in degrees of the best pairs, and the stated deviations of the same talkers."""
    found = np.array([t.azimuth for t in located.talkers])
    if not len(found):
        return np.zeros(0), np.zeros(0)
    errors = apart_deg(found[:, None], truth)
    rows, columns = linear_sum_assignment(np.minimum(errors, 3.0 * FOUND_DEG))
    return errors[rows, columns], np.degrees([located.talkers[i].azimuth_std for i in rows])


def direct_bound_deg(case: Case, rendered: RenderedScene) -> Floats:
    """Bound on the azimuth of each talker from the direct sound in sensor noise, degrees."""
    space = search_space(case.array.positions_m, region="ring")
    dry = FrameCovariance(len(rendered.names), case.sample_rate)
    dry.add(rendered.dry)
    azimuths = unit_vector(np.radians(case.azimuths_deg))
    frames = [space.local(space.project(u), 0.01) for u in azimuths]
    a, da = steering_with_derivatives(
        case.array, dry.frequency_hz, frames, space, speed_m_s=speed_of_sound(), distance_m=case.distance_m
    )
    noise = float(np.mean(rendered.noise**2))
    # Frames overlap by half: each holds half of a sample's noise and information counts twice.
    fisher = 0.5 * fisher_information(a, da, dry.total, 0.5 * noise, 1)
    return np.asarray(np.degrees(np.sqrt(np.diag(bearing_bound(fisher)))))


def at_rest(scenes: int, rows: Sequence[tuple[int, float | None]] = ROWS) -> None:
    """Talkers at rest, their number estimated."""
    table = []
    for talkers, t20_s in rows:
        errors, scores, bounds, measured, whole, counted, invented = [], [], [], [], 0, 0, 0
        for case in drawn_cases("rest", talkers, t20_s, TABLE_SEEDS[:scenes]):
            rendered = case.render()
            measured += [t for t in rendered.t20_s if t is not None]
            located = locate_array(rendered.mixture, rendered.array, RATE)
            error, stated = matched(located, np.radians(case.azimuths_deg))
            near = error < FOUND_DEG
            errors += list(error[near])
            scores += list(error[near] / stated[near])
            bounds += list(direct_bound_deg(case, rendered))
            counted += located.count.estimated == talkers
            invented += len(located.talkers) - int(near.sum())
            whole += bool(near.sum() == talkers == len(located.talkers))
        table.append(
            [talkers, "none" if t20_s is None else f"{np.mean(measured):.2f}", f"{whole} of {scenes}",
             f"{counted} of {scenes}", invented,
             f"{np.median(errors):.2g}", f"{np.percentile(errors, 90):.2g}", _rms(scores), f"{_rms(bounds):.2g}"]
        )  # fmt: skip
    print_table(
        "Talkers at rest, 40 degrees apart or more",
        ["talkers", "T20, s", "all found, none invented", "number right", "invented", "median error, deg",
         "90th percentile, deg", "error over stated deviation, RMS", "Cramer-Rao bound, deg"],
        table,
    )  # fmt: skip


def _rms(values: Sequence[float]) -> float:
    return float(np.sqrt(np.mean(np.square(values)))) if len(values) else float("nan")


def methods(scenes: int) -> None:
    """The ways to score directions, number of talkers given."""
    table = []
    for method in METHODS:
        row: list[object] = [method]
        for talkers, t20_s in ((1, None), (2, None), (1, 0.4), (2, 0.4), (3, 0.4)):
            errors: list[float] = []
            for case in drawn_cases("methods", talkers, t20_s, TABLE_SEEDS[20 : 20 + scenes]):
                rendered = case.render()
                located = locate_array(rendered.mixture, rendered.array, RATE, talkers=talkers, method=method)
                error = matched(located, np.radians(case.azimuths_deg))[0]
                errors += [*error, *[180.0] * (talkers - len(error))]
            near = np.array(errors) < FOUND_DEG
            middle = float(np.median(np.array(errors)[near])) if near.any() else None
            row.append(f"{100 * near.mean():.0f} %, {'-' if middle is None else f'{middle:.2f}'}")
        table.append(row)
    heads = ["1, no room", "2, no room", "1, 0.4 s", "2, 0.4 s", "3, 0.4 s"]
    print_table("Methods, number of talkers given: found, median error in degrees", ["method", *heads], table)


def bound(trials: int) -> None:
    """The fit of all talkers at once against the bound, exact delays, no room."""
    table = []
    for azimuths in ((20.0,), (20.0, 75.0)):
        for snr_db in (20.0, 30.0, 40.0, 50.0, 60.0, 70.0, 80.0):
            ratio, stated, deviation = bound_trials(np.radians(azimuths), snr_db, trials)
            table.append(
                [len(azimuths), int(snr_db), f"{deviation:.2g}", float(ratio.min()), float(ratio.max()),
                 float(stated.min()), float(stated.max())]
            )  # fmt: skip
    print_table(
        f"Least-squares fit of all talkers, {trials} trials each, speech-like noise of 1 s",
        ["talkers", "SNR, dB", "RMS error, deg", "error / bound, least", "most", "stated / error, least", "most"],
        table,
    )


def bound_trials(azimuths: Floats, snr_db: float, trials: int, *, seed: int = 4001) -> tuple[Floats, Floats, float]:
    """RMS error over bound, stated deviation over RMS error (both per talker), and the mean RMS error in degrees."""
    rng = np.random.default_rng([seed, len(azimuths), int(snr_db)])
    samples = RATE
    hz = np.fft.rfftfreq(samples, 1.0 / RATE)
    space = search_space(PUCK.positions_m, region="ring")
    frames = [space.local(space.project(unit_vector(a)), 0.01) for a in azimuths]
    a, da = steering_with_derivatives(PUCK, hz, frames, space, speed_m_s=speed_of_sound())
    s = np.fft.rfft(rng.standard_normal((len(azimuths), samples))) / np.maximum(1.0, hz / 500.0)
    s[:, (hz < 120.0) | (hz > 7000.0)] = 0.0
    clean = np.fft.irfft(np.einsum("fmk,kf->mf", a, s), samples)
    noise = float(np.mean(np.fft.irfft(s, samples) ** 2)) * 10.0 ** (-snr_db / 10.0)
    used = (hz > 100.0) & (hz < 7600.0)
    power = np.einsum("kf,lf->fkl", s[:, used], s[:, used].conj())
    least = np.sqrt(np.diag(bearing_bound(fisher_information(a[used], da[used], power, samples * noise, 1))))
    errors, stated = np.empty((trials, len(azimuths))), np.empty((trials, len(azimuths)))
    for t in range(trials):
        block = FrameCovariance(PUCK.channels, RATE)
        block.add(clean + np.sqrt(noise) * rng.standard_normal(clean.shape))
        start = np.array([space.project(unit_vector(x + rng.normal(0.0, 0.02))) for x in azimuths])
        fit = fit_bearings(block, PUCK, start, space)
        found = np.arctan2(fit.x[:, 1], fit.x[:, 0])
        errors[t] = np.angle(np.exp(1j * (found - azimuths)))
        stated[t] = np.sqrt(np.diag(fit.covariance))
    rms = np.sqrt(np.mean(errors**2, axis=0))
    return rms / least, np.sqrt(np.mean(stated**2, axis=0)) / rms, float(np.degrees(rms.mean()))


def _moving_scene(
    seed: int, tracks: dict[str, Track], t20_s: float, *, orientation: Orientation | None = None, seconds: float = 15.0
) -> RenderedScene:
    """A room of its own for each seed; ``tracks`` by name of the voice."""
    rng = np.random.default_rng([seed, 7])
    size = [float(rng.uniform(5.0, 7.0)), float(rng.uniform(4.5, 5.5)), float(rng.uniform(2.5, 3.0))]
    spec = RenderSpec(
        duration_s=seconds,
        sample_rate=RATE,
        seed=seed,
        room=RoomSpec(size_m=size, t20_s=t20_s),
        array=ArraySpec(positions_m=PUCK.positions_m.tolist(), reference_channel=PUCK.reference_channel),
        talker=[TalkerSpec(name=name) for name in tracks],
        noise=NoiseSpec(sensor_snr_db=30.0),
    )
    clips = {name: clip(name, seconds, RATE) for name in tracks}
    return render_scene(spec, clips=clips, tracks=tracks, orientation=orientation)


def _path(start_deg: float, sweep_deg: float, seconds: float = 15.0) -> Track:
    """At rest for two seconds, then ``sweep_deg`` in ten seconds, then at rest, 1.2 m away."""
    time_s = np.linspace(0.0, seconds, 151)
    azimuth = np.radians(start_deg + sweep_deg * np.clip((time_s - 2.0) / 10.0, 0.0, 1.0))
    return Track(time_s, azimuth, np.zeros(151), np.full(151, 1.2))


def moving(scenes: int) -> None:
    """Talkers that walk: alone, and two through each other; errors over time, and distances between sets."""
    table = []
    for label, count, sweep in (("one walks 90 deg in 10 s", 1, 90.0), ("two walk through each other", 2, 100.0)):
        errors, sets, parts, whole, kept = [], [], [], 0, 0
        for seed in TABLE_SEEDS[40 : 40 + scenes]:
            rng = np.random.default_rng([seed, 8])
            start, side = float(rng.uniform(-180.0, 180.0)), float(rng.choice([-1.0, 1.0]))
            voices = [str(v) for v in rng.choice(VOICES[:3], count, replace=False)]
            paths = [_path(start, side * sweep), _path(start + side * sweep, -side * sweep)][:count]
            rendered = _moving_scene(seed, dict(zip(voices, paths, strict=True)), 0.3)
            located = locate_array(rendered.mixture, rendered.array, RATE)
            whole += len(located.talkers) == count
            times = np.arange(0.5, 14.5, 0.25)
            truth = np.stack([p.at(times)[0] for p in paths])
            found = np.array([t.track.at(times)[0] for t in located.talkers]).reshape(-1, len(times))
            distance = apart_deg(found[:, None], truth[None])
            errors += list(np.median(distance, axis=2).min(axis=0)) if len(found) else [180.0] * count
            ends = [apart_deg(f[:8], t[:8]).max() < 15 and apart_deg(f[-8:], t[-8:]).max() < 15
                    for f in found for t in truth]  # fmt: skip
            kept += sum(ends) >= count
            for i in range(len(times)):
                u, v = unit_vector(found[:, i]), unit_vector(truth[:, i])
                sets.append(np.degrees(ospa(u, v)))
                parts.append(np.degrees(gospa(u, v).distance))
        table.append(
            [label, f"{whole} of {scenes}", f"{kept} of {scenes}", float(np.median(errors)), float(np.max(errors)),
             float(np.mean(sets)), float(np.mean(parts))]
        )  # fmt: skip
    print_table(
        "Talkers that walk, T20 0.3 s",
        ["scene", "number of tracks right", "names kept", "median of the median error, deg", "worst", "OSPA, deg",
         "GOSPA, deg"],
        table,
    )  # fmt: skip


def turning(scenes: int) -> None:
    """The array turned by 45 degrees at a time, a talker at rest: bearing in the world from each hold alone."""
    time_s = np.arange(0.0, 16.0, 0.02)
    holds = [(3.5 * k + 0.6 * (k > 0), 3.5 * (k + 1)) for k in range(4)]
    turned = 45.0 * sum(np.clip((time_s - 3.5 * k) / 0.6, 0.0, 1.0) for k in (1, 2, 3, 4))
    quaternions = Rotation.from_euler("z", np.asarray(turned)[:, None], degrees=True).as_quat(scalar_first=True)
    orientation = Orientation(time_s, quaternions)
    late = Orientation(time_s + 0.4, quaternions)
    each, whole, offsets = [], [], []
    for seed in TABLE_SEEDS[60 : 60 + scenes]:
        azimuth = float(np.random.default_rng([seed, 9]).uniform(-180.0, 180.0))
        rendered = _moving_scene(seed, {VOICES[seed % 3]: _path(azimuth, 0.0)}, 0.3, orientation=orientation)
        located = locate_array(rendered.mixture, rendered.array, RATE, orientation=orientation)
        error = matched(located, np.radians([azimuth]))[0]
        whole.append(float(error[0]) if len(located.talkers) == 1 else 180.0)
        for start, stop in holds:
            part = Orientation(time_s - start, quaternions)
            samples = rendered.mixture[:, round(start * RATE) : round(stop * RATE)]
            alone = locate_array(samples, rendered.array, RATE, orientation=part, talkers=1)
            each.append(float(apart_deg(alone.talkers[0].azimuth, np.radians(azimuth))) if alone.talkers else 180.0)
        guessed = locate_array(
            rendered.mixture, rendered.array, RATE, orientation=late, clock_offset_s="estimate"
        ).clock_offset_s
        offsets.append(abs((guessed or 0.0) - 0.4))
    print_table(
        "Array turned by 45 degrees at a time, talker at rest, T20 0.3 s",
        ["scenes", "median error after a turn, deg", "worst", "within 4 deg", "whole recording, median, deg", "worst",
         "clock offset, worst error, s"],
        [[scenes, float(np.median(each)), float(np.max(each)), f"{100 * np.mean(np.array(each) < 4.0):.0f} %",
          float(np.median(whole)), float(np.max(whole)), float(np.max(offsets))]],
    )  # fmt: skip


def separation(scenes: int) -> None:
    """What located instead of given bearings cost the separation."""
    table = []
    for talkers in (2, 3):
        for variant in ("model", "full"):
            given, located = [], []
            for case in drawn_cases("separation", talkers, 0.4, TABLE_SEEDS[80 : 80 + scenes]):
                rendered = case.render()
                for sink, known in ((given, True), (located, False)):
                    solution = solve(case.scene(rendered, bearings=known), variant)
                    sink.append(_sir(solution.signals, rendered) if solution.signals is not None else -np.inf)
            loss = np.array(given) - np.array(located)
            table.append([talkers, variant, float(np.mean(given)), float(np.mean(located)), float(loss.mean()),
                          float(loss.max())])  # fmt: skip
    print_table(
        "Separation with located instead of given bearings, T20 0.4 s",
        ["talkers", "variant", "SIR given, dB", "SIR located, dB", "loss, dB", "worst scene, dB"],
        table,
    )


def _sir(signals: Floats, rendered: RenderedScene) -> float:
    """Mean SIR; an estimate too few or too many is made up for by silence or left out."""
    talkers = len(rendered.names)
    if len(signals) < talkers:
        return float("-inf")
    grades = grade(signals[:talkers], rendered.early, sample_rate=RATE, speech=False)
    return float(np.mean([t.sir_db for t in grades.talkers if t.sir_db is not None]))


def speed(scenes: int) -> None:
    """Locating against real time."""
    case = next(iter(drawn_cases("speed", 3, 0.4, TABLE_SEEDS[:1])))
    rendered = case.render()
    table = []
    still = Orientation(np.array([0.0, 15.0]), np.array([[1.0, 0, 0, 0], [0.7071, 0, 0, 0.7071]]))
    calls: list[tuple[str, Callable[[], Located]]] = [
        ("mixture", lambda: locate_array(rendered.mixture, rendered.array, RATE)),
        ("mixture, array turning all the time",
         lambda: locate_array(rendered.mixture, rendered.array, RATE, orientation=still)),
        ("srp", lambda: locate_array(rendered.mixture, rendered.array, RATE, method="srp")),
        ("snapshots", lambda: locate_array(rendered.mixture, rendered.array, RATE, method="snapshots")),
    ]  # fmt: skip
    for label, call in calls:
        wall, cpu = np.inf, np.inf
        for _ in range(max(2, min(scenes, 3))):
            began, used = time.perf_counter(), time.process_time()
            call()
            wall, cpu = min(wall, time.perf_counter() - began), min(cpu, time.process_time() - used)
        table.append([label, case.seconds / wall, case.seconds / cpu])
    print_table("Speed, 7 microphones, 3 talkers, 15 s", ["", "times real time", "times real time, of one core"], table)


PARTS: dict[str, Callable[[int], None]] = {
    "bound": lambda scenes: bound(max(20, 30 * scenes)),
    "rest": at_rest,
    "methods": lambda scenes: methods(max(2, scenes // 4)),
    "moving": lambda scenes: moving(max(2, scenes // 2)),
    "turning": lambda scenes: turning(max(2, scenes // 2)),
    "separation": lambda scenes: separation(max(2, scenes // 4)),
    "speed": speed,
}


def main() -> None:
    """Print the tables asked for."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--only", nargs="*", choices=list(PARTS), default=list(PARTS))
    parser.add_argument("--scenes", type=int, default=20, help="scenes per row (some parts take a share of them)")
    options = parser.parse_args()
    warnings.simplefilter("ignore")
    for name in options.only:
        PARTS[name](options.scenes)


if __name__ == "__main__":
    main()
