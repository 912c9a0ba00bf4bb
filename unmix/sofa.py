"""Measured responses of an array as SOFA files (AES69): read, checked, interpolated, written.

Read are the conventions of finite impulse responses in free field, SimpleFreeFieldHRIR and GeneralFIR: `Data.IR` of
measurements, receivers and taps. Directions of the sources are taken relative to the listener (the array), turned into
its view; receivers are the microphones. Angles inside are radians, counter-clockwise from the front.

Between measured directions the responses of those around, weighted so that the mean of their directions is the one
asked for, are aligned in time, averaged over frequency, and given the delay averaged alike.

Source: AES69-2015, "AES standard for file exchange - Spatial acoustic data file format".
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from unmix.errors import FileError, InputError
from unmix.files import write_aside
from unmix.physics import direction_angles, unit_vector

if TYPE_CHECKING:
    import h5py

__all__ = ["CONVENTIONS", "Responses", "read_sofa", "write_sofa"]

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

CONVENTIONS = ("SimpleFreeFieldHRIR", "GeneralFIR")
FARTHEST_DEG = 30.0
"""A talker must not be farther than this from every measured direction."""
_EXACT = 1e-4
_NEIGHBOURS = 5


@dataclass(frozen=True)
class Responses:
    """Impulse responses of an array, measured from several directions.

    taps         (directions, channels, taps), the delays that the file gives apart included
    sample_rate  hertz
    azimuth, elevation  (directions,) radians
    distance_m   (directions,)
    positions_m  (channels, 3) of the receivers
    """

    taps: Floats
    sample_rate: float
    azimuth: Floats
    elevation: Floats
    distance_m: Floats
    positions_m: Floats
    title: str = ""

    @property
    def channels(self) -> int:
        """Number of receivers."""
        return int(self.taps.shape[1])

    def take(self, channels: Any) -> Responses:
        """The responses of some channels only."""
        return replace(self, taps=self.taps[:, channels], positions_m=self.positions_m[channels])

    def nearest(self, azimuth: float, elevation: float) -> tuple[int, float]:
        """Index of the measured direction nearest to a bearing, and the angle to it in radians."""
        angles = self._angles(azimuth, elevation)
        at = int(np.argmin(angles))
        return at, float(angles[at])

    def spectrum(
        self, azimuth: float, elevation: float, frequency_hz: Floats, *, interpolate: bool = True
    ) -> Complexes:
        """Frequency response at a bearing: (frequencies, channels), at frequencies up to half the sample rate.

        Raises InputError when no direction within `FARTHEST_DEG` was measured.
        """
        angles = self._angles(azimuth, elevation)
        order = np.argsort(angles, kind="stable")[:_NEIGHBOURS]
        if np.degrees(angles[order[0]]) > FARTHEST_DEG:
            raise InputError(
                f"{self.title or 'responses'}: azimuth {np.degrees(azimuth):.0f}, elevation "
                f"{np.degrees(elevation):.0f} deg lies {np.degrees(angles[order[0]]):.0f} deg from the nearest "
                "measured direction; correct the bearing or measure there"
            )
        basis = np.exp(-2j * np.pi / self.sample_rate * np.outer(frequency_hz, np.arange(self.taps.shape[2])))
        if angles[order[0]] < _EXACT or not interpolate or len(order) < 2:
            return np.asarray(basis @ self.taps[order[0]].T)
        around = unit_vector(self.azimuth[order], self.elevation[order])
        weight = _weights(around, unit_vector(azimuth, elevation), angles[order])
        return self._average(order[weight > 0.0], weight[weight > 0.0], frequency_hz, basis)

    def _angles(self, azimuth: float, elevation: float) -> Floats:
        cosine = unit_vector(self.azimuth, self.elevation) @ unit_vector(azimuth, elevation)
        return np.asarray(np.arccos(np.clip(cosine, -1.0, 1.0)))

    def _average(self, index: NDArray[np.int64], weight: Floats, frequency_hz: Floats, basis: Complexes) -> Complexes:
        lag = _lags(self.taps[index], self.taps[index[0]])  # (neighbours, channels) in samples
        total = np.zeros((len(frequency_hz), self.channels), np.complex128)
        for n, direction in enumerate(index):
            undo = np.exp(2j * np.pi / self.sample_rate * np.outer(frequency_hz, lag[n]))
            total += weight[n] * (basis @ self.taps[direction].T) * undo
        delay = weight @ lag
        return np.asarray(total * np.exp(-2j * np.pi / self.sample_rate * np.outer(frequency_hz, delay)))


def _weights(around: Floats, direction: Floats, angles: Floats) -> Floats:
    """Weights from zero up, of sum 1, whose mean of the directions `around` (n, 3) comes nearest to `direction`; among
    equals those of the nearest."""
    from scipy.optimize import nnls

    n = len(around)
    rows = np.vstack([around.T, 10.0 * np.ones((1, n)), 0.02 * np.diag(angles)])
    weight = nnls(rows, np.concatenate([direction, [10.0], np.zeros(n)]))[0]
    return np.asarray(weight / weight.sum())


def _lags(taps: Floats, first: Floats) -> Floats:
    """Delay in samples of each response (n, channels, taps) against `first` (channels, taps), by cross-correlation."""
    size = 1 << (2 * taps.shape[2] - 1).bit_length()
    up = 32
    spectra, base = np.fft.rfft(taps, size), np.fft.rfft(first, size)
    correlation = np.fft.irfft(spectra * base.conj(), size * up)
    at = np.argmax(correlation, axis=-1)
    return np.asarray(np.where(at > size * up // 2, at - size * up, at) / up)


def read_sofa(path: str | Path) -> Responses:
    """Read a SOFA file. Raises FileError or InputError naming file, key and remedy."""
    import h5py

    path = Path(path)
    if not path.exists():
        raise FileError(f"{path}: no such file; check the path")
    try:
        with h5py.File(path, "r") as file:
            return _read(file, path)
    except OSError as error:
        if isinstance(error, FileError):
            raise
        raise FileError(f"{path}: not a SOFA file, or cut short ({error}); copy it again") from None


def _read(file: h5py.File, path: Path) -> Responses:
    _check_convention(file, path)
    taps = _values(file, "Data.IR", path)
    if taps.ndim != 3 or 0 in taps.shape:
        raise InputError(f"{path}: Data.IR has shape {taps.shape}; expected measurements, receivers, taps")
    if not np.all(np.isfinite(taps)):
        raise InputError(f"{path}: Data.IR holds values that are not finite; measure again")
    rate = _values(file, "Data.SamplingRate", path).ravel()
    unit = _text(file["Data.SamplingRate"].attrs.get("Units", "hertz")).lower()
    if unit not in ("hertz", "hz") or len(set(rate.tolist())) != 1 or not rate[0] > 0.0:
        raise InputError(f"{path}: Data.SamplingRate must be one rate in hertz, not {rate[:3].tolist()} {unit}")
    m, r, _ = taps.shape
    source = _directions(file, path, m)
    azimuth, elevation = direction_angles(source)
    positions = _receivers(file, path, r)
    spread = np.linalg.norm(unit_vector(azimuth, elevation) - unit_vector(azimuth[0], elevation[0]), axis=1)
    if m > 1 and spread.max() < 1e-6:
        raise InputError(
            f"{path}: SourcePosition: all {m} measurements have the same direction; coordinates are missing"
        )
    delay = _values(file, "Data.Delay", path) if "Data.Delay" in file else np.zeros((1, r))
    return Responses(
        taps=_with_delay(taps, np.broadcast_to(delay, (m, r)), path),
        sample_rate=float(rate[0]),
        azimuth=azimuth,
        elevation=elevation,
        distance_m=np.linalg.norm(source, axis=1),
        positions_m=positions,
        title=_text(file.attrs.get("Title", "")) or path.stem,
    )


def _check_convention(file: h5py.File, path: Path) -> None:
    if _text(file.attrs.get("Conventions", "")) != "SOFA":
        raise InputError(f"{path}: an HDF5 file, but not SOFA (attribute `Conventions`); convert it to AES69")
    convention, kind = _text(file.attrs.get("SOFAConventions", "")), _text(file.attrs.get("DataType", ""))
    if convention not in CONVENTIONS:
        raise InputError(
            f"{path}: convention {convention or '(none)'} is not read; {' and '.join(CONVENTIONS)} are: convert it"
        )
    if kind != "FIR":
        raise InputError(f"{path}: DataType {kind or '(none)'}; impulse responses (FIR) are needed: convert it")


def _values(file: h5py.File, name: str, path: Path) -> Floats:
    if name not in file:
        raise InputError(f"{path}: {name} is missing; AES69 requires it")
    return np.asarray(file[name][...], dtype=np.float64)


def _text(value: Any) -> str:
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace")
    return value if isinstance(value, str) else ""


def _cartesian(file: h5py.File, name: str, values: Floats, path: Path) -> Floats:
    """Coordinates (..., 3) in metres, in whichever of the standard's types and units the file gives them."""
    kind = _text(file[name].attrs.get("Type", "")).lower()
    units = [u.strip().rstrip("s") for u in _text(file[name].attrs.get("Units", "")).lower().split(",")]
    units = ["metre" if u in ("meter", "m") else u for u in units]
    if not np.all(np.isfinite(values)):
        raise InputError(f"{path}: {name} holds values that are not finite; coordinates are missing")
    if kind == "cartesian" and set(units) == {"metre"}:
        return values
    if kind == "spherical" and units == ["degree", "degree", "metre"]:
        azimuth, elevation, distance = np.moveaxis(values, -1, 0)
        if np.abs(elevation).max() > 90.0 + 1e-6:
            raise InputError(f"{path}: {name}: elevations beyond 90 degrees; the standard's run from -90 to 90")
        return np.asarray(distance[..., None] * unit_vector(np.radians(azimuth), np.radians(elevation)))
    raise InputError(
        f"{path}: {name} is {kind or 'of no type'} in {', '.join(units) or 'no unit'}; the standard has cartesian in "
        "metre and spherical in degree, degree, metre"
    )


def _directions(file: h5py.File, path: Path, measurements: int) -> Floats:
    """Sources (measurements, 3) as the listener's view has them."""
    source = _points(file, "SourcePosition", path, measurements)
    listener = _points(file, "ListenerPosition", path, measurements)
    relative = source - listener
    if np.linalg.norm(relative, axis=1).min() < 1e-6:
        raise InputError(f"{path}: SourcePosition: a source stands at the listener; coordinates are missing")
    if "ListenerView" not in file:
        return relative
    view = _points(file, "ListenerView", path, measurements)
    up = _points(file, "ListenerUp", path, measurements, like="ListenerView")
    front = view / np.linalg.norm(view, axis=1, keepdims=True)
    left = np.cross(up, front)
    left = left / np.maximum(np.linalg.norm(left, axis=1, keepdims=True), 1e-12)
    frame = np.stack([front, left, np.cross(front, left)], axis=1)
    return np.asarray(np.einsum("mij,mj->mi", frame, relative))


def _points(file: h5py.File, name: str, path: Path, measurements: int, *, like: str = "") -> Floats:
    values = _values(file, name, path)
    if values.ndim != 2 or values.shape[1] != 3 or values.shape[0] not in (1, measurements):
        raise InputError(f"{path}: {name} has shape {values.shape}; expected 1 or {measurements} rows of 3")
    typed = name if "Type" in file[name].attrs or not like else like
    return np.broadcast_to(_cartesian(file, typed, values, path), (measurements, 3))


def _receivers(file: h5py.File, path: Path, receivers: int) -> Floats:
    values = _values(file, "ReceiverPosition", path)
    values = values[:, :, 0] if values.ndim == 3 else values
    if values.shape != (receivers, 3):
        raise InputError(f"{path}: ReceiverPosition has shape {values.shape}; Data.IR has {receivers} receivers")
    return _cartesian(file, "ReceiverPosition", values, path)


def _with_delay(taps: Floats, delay: Floats, path: Path) -> Floats:
    """Responses with the delays that the file gives apart (samples) put in."""
    if not np.any(delay):
        return taps
    if delay.min() < 0.0 or not np.all(np.isfinite(delay)):
        raise InputError(f"{path}: Data.Delay must be samples from zero up")
    extra = int(np.ceil(delay.max())) + 16
    size = 1 << (taps.shape[2] + extra).bit_length()
    omega = 2.0 * np.pi * np.fft.rfftfreq(size)
    spectrum = np.fft.rfft(taps, size) * np.exp(-1j * omega * delay[..., None])
    return np.asarray(np.fft.irfft(spectrum, size)[..., : taps.shape[2] + extra])


def write_sofa(path: str | Path, responses: Responses, *, overwrite: bool = False) -> None:
    """Write responses as SOFA: SimpleFreeFieldHRIR for two receivers, GeneralFIR for any other number.

    Raises FileError when the file exists and `overwrite` is not given.
    """
    import h5py

    path = Path(path)
    m, r, n = responses.taps.shape
    with write_aside(path, overwrite=overwrite) as aside, h5py.File(aside, "w", track_order=True) as file:
        convention = CONVENTIONS[0] if r == 2 else CONVENTIONS[1]
        for name, value in _attributes(convention, responses.title or path.stem).items():
            file.attrs[name] = np.bytes_(value)
        scales = _scales(file, {"I": 1, "C": 3, "R": r, "E": 1, "N": n, "M": m})
        spherical = np.stack(
            [np.degrees(responses.azimuth), np.degrees(responses.elevation), responses.distance_m], axis=1
        )
        degrees, metre = ("spherical", "degree, degree, metre"), ("cartesian", "metre")
        _variable(file, scales, "ListenerPosition", np.zeros((1, 3)), "IC", metre)
        _variable(file, scales, "ListenerView", np.array([[1.0, 0.0, 0.0]]), "IC", metre)
        _variable(file, scales, "ListenerUp", np.array([[0.0, 0.0, 1.0]]), "IC", metre)
        _variable(file, scales, "ReceiverPosition", responses.positions_m[:, :, None], "RCI", metre)
        _variable(file, scales, "SourcePosition", spherical, "MC", degrees)
        _variable(file, scales, "EmitterPosition", np.zeros((1, 3, 1)), "ECI", metre)
        _variable(file, scales, "Data.IR", responses.taps, "MRN", None)
        _variable(file, scales, "Data.SamplingRate", np.array([responses.sample_rate]), "I", None)
        file["Data.SamplingRate"].attrs["Units"] = np.bytes_("hertz")
        _variable(file, scales, "Data.Delay", np.zeros((1, r)), "IR", None)


def _attributes(convention: str, title: str) -> dict[str, str]:
    from datetime import UTC, datetime

    from unmix.version import __version__

    now = datetime.now(UTC).strftime("%Y-%m-%d %H:%M:%S")
    return {
        "Conventions": "SOFA", "Version": "2.1", "SOFAConventions": convention, "SOFAConventionsVersion": "1.0",
        "APIName": "unmix", "APIVersion": __version__, "ApplicationName": "unmix", "ApplicationVersion": __version__,
        "AuthorContact": " ", "Comment": " ", "DataType": "FIR", "History": " ", "License": "No license provided, ask "
        "the author for permission", "Organization": " ", "References": " ", "RoomType": "free field", "Origin": " ",
        "DateCreated": now, "DateModified": now, "Title": title, "DatabaseName": title, "ListenerShortName": title,
    }  # fmt: skip


def _scales(file: h5py.File, sizes: dict[str, int]) -> dict[str, h5py.Dataset]:
    """The dimensions of netCDF-4, which SOFA files are: HDF5 dimension scales without values."""
    scales = {}
    for name, size in sizes.items():
        scales[name] = file.create_dataset(name, (size,), dtype=">f4")
        scales[name].make_scale(f"This is a netCDF dimension but not a netCDF variable.{size:>10d}")
    return scales


def _variable(
    file: h5py.File,
    scales: dict[str, h5py.Dataset],
    name: str,
    values: Floats,
    dimensions: str,
    coordinates: tuple[str, str] | None,
) -> None:
    data = file.create_dataset(name, data=np.ascontiguousarray(values))
    for axis, dimension in enumerate(dimensions):
        data.dims[axis].attach_scale(scales[dimension])
    if coordinates is not None:
        data.attrs["Type"], data.attrs["Units"] = map(np.bytes_, coordinates)
