"""The live separator: made from an array, bearings and a variant; audio goes in and comes out chunk by chunk."""

from __future__ import annotations

import hashlib
import io
import json
import warnings
import zipfile
from collections.abc import Callable, Sequence
from typing import Any

import msgspec
import numpy as np
from numpy.typing import ArrayLike, NDArray

from unmix.array import Array
from unmix.audio import HIGHEST_RATE_HZ, LOWEST_RATE_HZ
from unmix.errors import InputError, UnmixWarning, UnsolvableError
from unmix.live.ahead import Ahead, Prepared
from unmix.live.bank import BankStage, Change
from unmix.live.design import Designer, check_runs_live, noise_spectra
from unmix.live.latency import measured_latency
from unmix.live.stage import LiveStage, turn
from unmix.model.delays import Paths
from unmix.model.noise import Spectra
from unmix.scene import Scene, Talker
from unmix.solvers.stationary import FilterBank
from unmix.variant import Variant, load_variant

__all__ = ["BearingSource", "LiveSeparator", "track_source"]

Floats = NDArray[np.float64]
BearingSource = Callable[[float], Sequence[Talker] | None]
"""From the time in seconds since the start to where the talkers are, or None for no news."""

FADE_S = 0.02
POLL_S = 0.1
LEAST_TURN = np.radians(1.0)
_FORMAT = "unmix-live-1"


class LiveSeparator:
    """Separates talkers while they speak: push chunks of any size, get as many samples of each talker.

    Parameters
    ----------
    array : Array
        The microphones.
    talkers : sequence of Talker
        Who sits where, `unmix.Talker.at("mate", 20.0)`; at rest until `set_bearings` or `source` says otherwise.
    variant : str, path or Variant
        One whose room stage runs frame by frame: `low-latency`, whose block comes on top of its look-ahead, or
        `dereverb` with recursive prediction; or one that is filters alone: `model` (or the same with constraint
        `propagated`), or a baseline.
    sample_rate : int
        In hertz, of everything pushed.
    noise : (channels, samples) array, optional
        A stretch without talkers, for noise `measured`.
    lookahead_s : float, optional
        Most that the filters may see of the future, which is the latency. They are then those whose output is nearest
        to the variant's; `cut_share` says how much of the variant's filters lies outside. Left out, filters are whole
        and the output equals that of `unmix.solve`, late by `latency_samples`.
    fade_s : float
        Seconds over which filters change when bearings do.
    source : callable, optional
        Asked every 0.1 s of audio with the time in seconds; returns talkers where they now are, or None.
    wait : bool
        Whether a change of bearings waits for its filters, which take the time of several chunks to design. The
        same audio then gives the same output every time. Otherwise they are designed in a thread while the audio goes
        on, and the change begins with the first chunk after; of several asked for meanwhile the last is made.

    Raises InputError for what was handed in, UnsolvableError for a variant that cannot run so (with the reason) and for
    bearings that coincide.

    Memory and work per sample are constant. After `flush` the separator stands at the start of a new stream.
    """

    def __init__(
        self,
        array: Array,
        talkers: Sequence[Talker],
        variant: str | Variant = "low-latency",
        *,
        sample_rate: int,
        temperature_c: float = 20.0,
        noise: ArrayLike | Spectra | None = None,
        lookahead_s: float | None = None,
        fade_s: float = FADE_S,
        source: BearingSource | None = None,
        wait: bool = True,
    ) -> None:
        if not LOWEST_RATE_HZ <= sample_rate <= HIGHEST_RATE_HZ:
            raise InputError(f"sample rate {sample_rate} Hz; {LOWEST_RATE_HZ} to {HIGHEST_RATE_HZ} Hz are supported")
        if lookahead_s is not None and lookahead_s < 0.0:
            raise InputError(f"look-ahead of {lookahead_s:g} s; give seconds from zero up")
        self.variant, self.array, self.sample_rate = load_variant(variant), array, sample_rate
        spectra = noise if noise is None or isinstance(noise, Spectra) else _spectra(noise, array)
        check_runs_live(self.variant, spectra=spectra)
        self._design = Designer(array, self.variant, sample_rate, temperature_c, spectra)
        self._lookahead = None if lookahead_s is None else round(lookahead_s * sample_rate)
        self._fade = max(1, round(fade_s * sample_rate))
        self.talkers = tuple(talkers)
        self._source, self._poll = source, max(1, round(POLL_S * sample_rate))
        self._stage = self._make_stage()
        self._ahead = None if wait else Ahead(self._stage.prepare)
        self._position = 0

    @classmethod
    def from_scene(
        cls,
        scene: Scene,
        variant: str | Variant = "low-latency",
        *,
        lookahead_s: float | None = None,
        wait: bool = True,
    ) -> LiveSeparator:
        """A separator for a scene's array and talkers; talkers with a track are followed along it."""
        if scene.orientation is not None:
            raise InputError(f"{scene.title}: an array that turns cannot run chunk by chunk; leave [orientation] out")
        moving = any(talker.track is not None for talker in scene.talkers)
        source = track_source(scene.talkers) if moving else None
        return cls(
            scene.array,
            scene.talkers if source is None else [_at(t, 0.0) for t in scene.talkers],
            variant,
            sample_rate=scene.sample_rate,
            temperature_c=scene.temperature_c,
            noise=noise_spectra(scene),
            lookahead_s=lookahead_s,
            source=source,
            wait=wait,
        )

    @property
    def latency_samples(self) -> int:
        """Samples by which what comes out is late: sample t of the output belongs to t - latency_samples."""
        return self._stage.latency

    @property
    def latency_s(self) -> float:
        """The same in seconds; a device adds the length of its chunks."""
        return self.latency_samples / self.sample_rate

    @property
    def position(self) -> int:
        """Samples pushed since the start."""
        return self._position

    @property
    def cut_share(self) -> float:
        """Largest share of a talker's filter magnitude that was cut off."""
        return self._stage.cut_share if isinstance(self._stage, BankStage) else 0.0

    @property
    def filters(self) -> FilterBank | None:
        """The filters in use, or being faded in; None for a variant that is more than filters."""
        return self._stage.bank if isinstance(self._stage, BankStage) else None

    def whole_filters(self) -> FilterBank:
        """The variant's filters for the talkers where they now are, with nothing cut off; designed anew."""
        return self._design(self.talkers)

    def paths(self) -> Paths:
        """Delays and gains of the talkers where they now are."""
        return self._design.paths(self.talkers)

    @property
    def last_change(self) -> Change | None:
        """How the last change of bearings went, measured on the output; None before the first."""
        return self._stage.change if isinstance(self._stage, BankStage) else None

    def push(self, chunk: ArrayLike) -> Floats:
        """Take (channels, n) samples, full scale 1.0, n of any size; return (talkers, n).

        Raises InputError for another number of channels, integers, or NaN; nothing has then changed.
        """
        samples = self._checked(chunk)
        if self._source is None:
            return self._advance(samples)
        pieces, at = [np.zeros((self._stage.talkers, 0))], 0
        while at < samples.shape[1]:
            if self._position % self._poll == 0:
                self._ask()
            count = min(samples.shape[1] - at, self._poll - self._position % self._poll)
            pieces.append(self._advance(samples[:, at : at + count]))
            at += count
        return np.concatenate(pieces, axis=1)

    def flush(self) -> Floats:
        """The last `latency_samples` samples, as if silence followed: (talkers, latency_samples)."""
        if self._ahead is not None:
            self._take(self._ahead.rest())
        self._position = 0
        return self._stage.flush()

    def set_bearings(self, talkers: Sequence[Talker]) -> None:
        """Talkers, as many as before and in the same order, are somewhere else now: filters change over `fade_s`.

        Raises InputError for another number of talkers, UnsolvableError for bearings that coincide; the separator then
        goes on as it was. Without `wait` this returns at once, and bearings that coincide are told as a warning by the
        `push` that would have begun the change.
        """
        if len(talkers) != len(self.talkers):
            raise InputError(f"{len(talkers)} bearings for {len(self.talkers)} talkers; give one each, in their order")
        if self._ahead is not None:
            self._ahead.ask(talkers, self._position / self.sample_rate)
            return
        self._stage.prepare(talkers)()
        self.talkers = tuple(talkers)

    def measure_latency(self) -> tuple[int, ...]:
        """Latency in samples of each talker, measured with an impulse on a fresh stage; the stream is not touched."""
        return measured_latency(self._make_stage(), self.paths(), sample_rate=self.sample_rate)

    def save_state(self) -> bytes:
        """Everything that depends on what was pushed, as the bytes of a NumPy archive of a size that never grows."""
        head = {
            "format": _FORMAT,
            "made_for": self._fingerprint(),
            "position": self._position,
            "talkers": _plain(self.talkers),
            "asked": _plain(self._ahead.asked) if self._ahead is not None and self._ahead.asked is not None else None,
        }
        buffer = io.BytesIO()
        text = np.frombuffer(json.dumps(head).encode(), np.uint8)
        arrays: dict[str, Any] = {"head": text, **self._stage.state()}
        np.savez(buffer, **arrays)
        return buffer.getvalue()

    def restore(self, state: bytes) -> None:
        """Go on from `save_state` of a separator made in the same way: what follows is the same to the last bit.

        Raises InputError when the bytes are no state, or one of another array, variant or rate; nothing has then
        changed.
        """
        try:
            with np.load(io.BytesIO(state), allow_pickle=False) as archive:
                arrays = {name: archive[name] for name in archive.files}
            head = json.loads(arrays.pop("head").tobytes())
        except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile):
            raise InputError("these bytes are no state of a live separator; start without a state") from None
        if head.get("format") != _FORMAT or head.get("made_for") != self._fingerprint():
            raise InputError(
                "the state belongs to a separator of another array, variant, rate or latency; start without it"
            )
        try:
            self._stage.restore(arrays)
        except (KeyError, ValueError):
            raise InputError("the state is damaged; start without it") from None
        if self._ahead is not None:
            self._ahead.forget()
        self._position = head["position"]
        self.talkers = _talkers(head["talkers"])
        if head.get("asked") is not None:
            self.set_bearings(_talkers(head["asked"]))

    def _make_stage(self) -> LiveStage:
        room = self.variant.room
        if room is None:
            return BankStage(self._design, self.talkers, fade=self._fade, lookahead=self._lookahead)
        from unmix.live.adaptive import CausalRoomStage

        own = room.low_latency
        if own is not None and self._lookahead is not None:
            bound = min(own.look_ahead_s, self._lookahead / self.sample_rate)
            room = msgspec.structs.replace(room, low_latency=msgspec.structs.replace(own, look_ahead_s=bound))
        return CausalRoomStage(self._design, room, self.talkers)

    def _advance(self, samples: Floats) -> Floats:
        if self._ahead is not None:
            self._take(self._ahead.ready())
        out = self._stage.push(samples)
        self._position += samples.shape[1]
        return out

    def _ask(self) -> None:
        """Ask the source; bearings that cannot be used leave everything as it is, with a warning."""
        found = self._source(self._position / self.sample_rate) if self._source is not None else None
        if found is None:
            return
        try:
            self.set_bearings(found)
        except (InputError, UnsolvableError) as error:
            _tell_refused(self._position / self.sample_rate, error)

    def _take(self, prepared: Prepared | None) -> None:
        """Make a change that was prepared beside the audio."""
        if prepared is None:
            return
        if prepared.change is not None:
            prepared.change()
            self.talkers = prepared.talkers
        elif isinstance(prepared.error, InputError | UnsolvableError):
            _tell_refused(prepared.at_s, prepared.error)
        elif prepared.error is not None:
            raise prepared.error

    def _checked(self, chunk: ArrayLike) -> Floats:
        given = np.asarray(chunk)
        if given.ndim != 2 or len(given) != self.array.channels:
            raise InputError(
                f"chunk of shape {given.shape}; the array has {self.array.channels} microphones; give (channels, n)"
            )
        if not np.issubdtype(given.dtype, np.floating):
            raise InputError(f"chunk of type {given.dtype}; give floating point with full scale 1.0")
        finite = np.isfinite(given)
        if not finite.all():
            channel, sample = np.argwhere(~finite)[0]
            at = (self._position + sample) / self.sample_rate
            raise InputError(f"channel {channel} holds NaN or infinite samples at {at:.3f} s; leave this chunk out")
        return np.asarray(given, dtype=np.float64)

    def _fingerprint(self) -> str:
        array = msgspec.to_builtins(self.array.to_file())
        design = self._design
        responses = self.array.responses
        heard = "" if responses is None else hashlib.sha256(np.ascontiguousarray(responses.taps).tobytes()).hexdigest()
        parts = [
            array,
            heard,
            self.variant.to_dict(),
            self.sample_rate,
            design.temperature_c,
            self.latency_samples,
            self._fade,
        ]
        return hashlib.sha256(json.dumps(parts, sort_keys=True).encode()).hexdigest()


def _tell_refused(at_s: float, error: Exception) -> None:
    warnings.warn(f"bearings at {at_s:.1f} s not taken over: {error}", UnmixWarning, stacklevel=5)


def _plain(talkers: Sequence[Talker]) -> list[list[str | float | None]]:
    return [[t.name, t.azimuth, t.elevation, t.distance_m] for t in talkers]


def _talkers(plain: Sequence[Sequence[Any]]) -> tuple[Talker, ...]:
    return tuple(Talker(name, azimuth, elevation, distance) for name, azimuth, elevation, distance in plain)


def track_source(talkers: Sequence[Talker], *, least_turn: float = LEAST_TURN) -> BearingSource:
    """Bearings along the talkers' tracks; news only when somebody has turned by `least_turn` radians or more."""
    told: list[Talker] = []

    def source(time_s: float) -> Sequence[Talker] | None:
        now = [_at(talker, time_s) for talker in talkers]
        if told and max(map(turn, told, now)) < least_turn:
            return None
        told[:] = now
        return now

    return source


def _at(talker: Talker, time_s: float) -> Talker:
    if talker.track is None:
        return talker
    azimuth, elevation, distance = (float(np.ravel(v)[0]) for v in talker.track.at(np.array([time_s])))
    return Talker(talker.name, azimuth, elevation, distance if np.isfinite(distance) else None)


def _spectra(noise: ArrayLike, array: Array) -> Spectra:
    stretch = np.asarray(noise, dtype=np.float64)
    if stretch.ndim != 2 or len(stretch) != array.channels:
        raise InputError(f"noise of shape {stretch.shape}; give (channels, samples) of {array.channels} channels")
    return Spectra.of([stretch], array.channels)
