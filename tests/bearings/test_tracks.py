"""Following talkers: births, deaths, pauses, crossings, false detections, and the association against brute force."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from unmix.bearings.tracks import Detections, Motion, TrackedTalker, Tracker, _assignments

STEP_S = 0.25
CLUTTER = 0.3


def followed(
    *talkers: tuple[float, float, object],
    seconds: float = 15.0,
    seed: int = 1,
    clutter: float = CLUTTER,
    detection: float = 0.9,
    noise: float = 0.05,
    pauses: tuple[tuple[float, float], ...] = (),
    sphere: bool = False,
) -> list[TrackedTalker]:
    """Tracks of talkers (start, stop, azimuth in radians by time), each missed now and then, among false detections."""
    rng = np.random.default_rng(seed)
    tracker = Tracker(3 if sphere else 2, on_sphere=sphere)
    for t in np.arange(0.25, seconds, STEP_S):
        points = []
        for start, stop, path in talkers:
            silent = any(a <= t < b for a, b in pauses)
            if start <= t < stop and not silent and rng.random() < detection:
                azimuth = path(t) if callable(path) else float(path)  # type: ignore[arg-type]
                points.append(place(azimuth, sphere) + noise * rng.standard_normal(3 if sphere else 2))
        for _ in range(rng.poisson(clutter)):
            points.append(rng.standard_normal(3) if sphere else place(rng.uniform(-np.pi, np.pi)))  # noqa: PERF401
        x = np.array(points).reshape(-1, 3 if sphere else 2)
        if sphere and len(x):
            x /= np.linalg.norm(x, axis=1, keepdims=True)
        order = rng.permutation(len(x))
        tracker.add(Detections(float(t), x[order], np.full(len(x), 1.0 / max(len(x), 1))))
    return tracker.finish()


def place(azimuth: float, sphere: bool = False) -> np.ndarray:
    return np.array([np.cos(azimuth), np.sin(azimuth), 0.0][: 3 if sphere else 2])


def azimuth(track: TrackedTalker) -> np.ndarray:
    return np.arctan2(track.x[:, 1], track.x[:, 0])


def off(track: TrackedTalker, path: object) -> np.ndarray:
    """Errors in degrees over the track's time."""
    truth = np.array([path(t) if callable(path) else path for t in track.time_s], dtype=np.float64)
    return np.degrees(np.abs(np.angle(np.exp(1j * (azimuth(track) - truth)))))


SEEDS = range(1, 6)


@pytest.mark.parametrize("seed", SEEDS)
def test_two_talkers_at_rest_among_false_detections(seed: int) -> None:
    tracks = followed((0.0, 15.0, 0.3), (0.0, 15.0, 1.5), seed=seed)
    assert len(tracks) == 2
    for truth in (0.3, 1.5):
        assert min(np.median(off(t, truth)) for t in tracks) < 1.5


@pytest.mark.parametrize("seed", SEEDS)
def test_births_and_deaths(seed: int) -> None:
    """The second talker comes at 5 s and leaves at 10 s; each track is as long as its talker is heard."""
    tracks = followed((0.0, 15.0, 0.3), (5.0, 10.0, -1.5), seed=seed)
    assert len(tracks) == 2
    first, second = tracks
    assert first.time_s[0] < 1.0 and first.time_s[-1] > 14.0
    assert 4.9 < second.time_s[0] < 6.0
    assert 9.0 < second.time_s[-1] < 10.8


@pytest.mark.parametrize("seed", SEEDS)
def test_a_pause_of_five_seconds_keeps_the_talker(seed: int) -> None:
    tracks = followed((0.0, 15.0, 0.3), seed=seed, pauses=((5.0, 10.0),))
    assert len(tracks) == 1
    quiet = (tracks[0].time_s > 5.2) & (tracks[0].time_s < 9.8)
    assert tracks[0].heard[quiet].mean() < 0.2
    assert tracks[0].heard[~quiet].mean() > 0.7
    assert np.max(off(tracks[0], 0.3)) < 8.0


@pytest.mark.parametrize("seed", SEEDS)
def test_a_pause_while_somebody_else_goes_on(seed: int) -> None:
    """The one who pauses is not taken over by the one who talks."""
    rng = np.random.default_rng(seed)
    tracker = Tracker(2)
    for t in np.arange(0.25, 16.0, STEP_S):
        talkers = [2.0] if 5.0 <= t < 10.0 else [0.5, 2.0]
        x = np.array([place(a) + 0.05 * rng.standard_normal(2) for a in talkers])
        tracker.add(Detections(float(t), x, np.full(len(x), 1.0 / len(x))))
    tracks = tracker.finish()
    assert len(tracks) == 2
    assert sorted(round(float(np.median(azimuth(t))), 1) for t in tracks) == [0.5, 2.0]


@pytest.mark.parametrize("seed", SEEDS)
def test_crossing_talkers_keep_their_tracks(seed: int) -> None:
    """Two walk through each other at 10 degrees per second each."""
    speed = np.radians(10.0)

    def there(t: float) -> float:
        return -0.9 + speed * t

    def back(t: float) -> float:
        return 1.7 - speed * t

    tracks = followed((0.0, 15.0, there), (0.0, 15.0, back), seed=seed)
    assert len(tracks) == 2
    for path in (there, back):
        assert min(np.median(off(t, path)) for t in tracks) < 3.0
        assert min(off(t, path)[-8:].max() for t in tracks) < 12.0
    ends = {min((0, 1), key=lambda k, p=path: np.median(off(tracks[k], p))) for path in (there, back)}
    assert ends == {0, 1}


@pytest.mark.parametrize("seed", SEEDS)
def test_a_walking_talker_is_one_track(seed: int) -> None:
    tracks = followed((0.0, 15.0, lambda t: 0.3 + np.radians(9.0) * min(max(t - 2.0, 0.0), 10.0)), seed=seed)
    assert len(tracks) == 1
    assert np.median(off(tracks[0], lambda t: 0.3 + np.radians(9.0) * min(max(t - 2.0, 0.0), 10.0))) < 3.0


@pytest.mark.parametrize("seed", SEEDS)
def test_false_detections_alone_are_nobody(seed: int) -> None:
    assert followed(seed=seed) == []


def test_the_seam_of_the_circle_is_no_obstacle() -> None:
    def path(t: float) -> float:
        return np.pi - 0.7 + 0.1 * t

    (track,) = followed((0.0, 15.0, path), clutter=0.0)
    assert np.median(off(track, path)) < 3.0


def test_on_the_sphere_directions_stay_on_it() -> None:
    tracks = followed((0.0, 15.0, 0.3), (0.0, 15.0, 2.0), sphere=True)
    assert len(tracks) == 2
    for track in tracks:
        np.testing.assert_allclose(np.linalg.norm(track.x, axis=1), 1.0, atol=1e-12)


def test_marginals_are_those_of_all_joint_events() -> None:
    """Against a listing of every map from tracks to detections or none in which no detection is used twice."""
    gain = np.random.default_rng(4).gamma(1.0, 2.0, (3, 3))
    total, marginal = 0.0, np.zeros((3, 3))
    for chosen in itertools.product([None, 0, 1, 2], repeat=3):
        used = [j for j in chosen if j is not None]
        if len(set(used)) < len(used):
            continue
        weight = float(np.prod([gain[i, j] for i, j in enumerate(chosen) if j is not None]))
        total += weight
        for i, j in enumerate(chosen):
            if j is not None:
                marginal[i, j] += weight
    got, sum_of_all = np.zeros((3, 3)), 0.0
    for pairs, weight in _assignments(gain):
        sum_of_all += weight
        for i, j in pairs:
            got[i, j] += weight
    np.testing.assert_allclose(got / sum_of_all, marginal / total, rtol=1e-12)


def test_existence_follows_the_chain() -> None:
    """A talker heard at last sight: speaking decays into pausing, and both into gone, at the rates stated."""
    motion = Motion()
    tracker = Tracker(2, motion=motion)
    for t in np.arange(0.0, 3.0, STEP_S):
        tracker.add(Detections(float(t), place(0.3)[None], np.ones(1)))
    track = tracker._tracks[0]
    speaks, pauses = track.speaks, track.pauses
    tracker._predict(track, 2.0)
    stays, keeps, waits = np.exp(-2 * motion.leave), np.exp(-2 * motion.pause), np.exp(-2 * motion.resume)
    assert track.speaks == pytest.approx(stays * (speaks * keeps + pauses * (1 - waits)))
    assert track.pauses == pytest.approx(stays * (speaks * (1 - keeps) + pauses * waits))


def test_the_velocity_is_an_ornstein_uhlenbeck_process() -> None:
    """Two half steps are one whole step; after a long time the velocity has forgotten where it came from."""
    tracker = Tracker(1)
    f, q = tracker._transition(0.5)
    g, p = tracker._transition(1.0)
    np.testing.assert_allclose(f @ f, g, rtol=1e-12)
    np.testing.assert_allclose(f @ q @ f.T + q, p, rtol=1e-9)
    f, q = tracker._transition(1e4)
    assert f[1, 1] < 1e-12 and q[1, 1] == pytest.approx(Motion().speed_rms ** 2)
