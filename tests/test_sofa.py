"""SOFA files: written and read back, turned, resampled, and refused with a remedy."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import h5py
import numpy as np
import pytest

from tests.conftest import circle
from unmix.array import Array
from unmix.errors import FileError, InputError
from unmix.model.delays import paths_from_bearings
from unmix.sofa import Responses, read_sofa, write_sofa

RATE = 48000
TAPS = 512
LATE = 200.0
"""Samples before the direct sound."""


def free_field(array: Array, step_deg: float = 10.0) -> Responses:
    """What a circle of level bearings would measure: pure delays, as taps."""
    azimuth = np.radians(np.arange(0.0, 360.0, step_deg))
    delay = paths_from_bearings(array, azimuth).delay_s * RATE + LATE
    omega = 2 * np.pi * np.fft.rfftfreq(TAPS)
    # Rolled off to half the sample rate, as converters do; a delay between samples would ring for ever.
    roll_off = np.cos(0.5 * np.pi * np.clip((omega / np.pi - 0.75) / 0.25, 0.0, 1.0)) ** 2
    taps = np.fft.irfft(roll_off * np.exp(-1j * omega * delay[..., None]), TAPS)
    n = len(azimuth)
    return Responses(taps, RATE, azimuth, np.zeros(n), np.full(n, 1.5), array.positions_m, "free field")


@pytest.fixture
def file(tmp_path: Path) -> Path:
    write_sofa(tmp_path / "array.sofa", free_field(circle(4)))
    return tmp_path / "array.sofa"


def test_what_is_written_is_read(file: Path) -> None:
    written, read = free_field(circle(4)), read_sofa(file)
    assert np.array_equal(read.taps, written.taps)
    assert read.sample_rate == RATE and read.title == "free field"
    assert np.exp(1j * read.azimuth) == pytest.approx(np.exp(1j * written.azimuth))
    assert read.distance_m == pytest.approx(1.5)
    assert read.positions_m == pytest.approx(written.positions_m)
    with h5py.File(file) as content:
        assert content.attrs["SOFAConventions"] == b"GeneralFIR"
        assert content["Data.IR"].dims[0][0].name == "/M"


def test_an_existing_file_stays(file: Path) -> None:
    with pytest.raises(FileError, match="exists already"):
        write_sofa(file, free_field(circle(3)))
    assert read_sofa(file).channels == 5


def test_an_array_comes_with_its_responses(file: Path) -> None:
    array = Array.load(file)
    assert array.channels == 5 and array.responses is not None
    assert array.take([0, 2]).responses is not None and array.take([0, 2]).responses.channels == 2
    with pytest.raises(InputError, match="cannot hold measured responses"):
        array.save(file.with_suffix(".toml"))


def test_interpolation_between_directions() -> None:
    """5 degrees off a 10 degree grid, free field, up to 8 kHz: aligned averaging leaves little."""
    measured, f = free_field(circle(4)), np.linspace(100.0, 8000.0, 80)
    truth = np.exp(
        -2j * np.pi * f[:, None] * (paths_from_bearings(circle(4), [np.radians(45.0)]).delay_s + LATE / RATE)
    )
    guess = measured.spectrum(np.radians(45.0), 0.0, f)
    assert 10 * np.log10(np.mean(np.abs(guess - truth) ** 2)) < -35.0
    nearest = measured.spectrum(np.radians(45.0), 0.0, f, interpolate=False)
    assert np.mean(np.abs(guess - truth) ** 2) < 0.01 * np.mean(np.abs(nearest - truth) ** 2)


def test_a_bearing_nobody_measured_is_refused() -> None:
    with pytest.raises(InputError, match="60 deg from the nearest"):
        free_field(circle(4)).spectrum(0.0, np.radians(60.0), np.array([500.0]))


def test_separate_delays_and_a_turned_listener(file: Path) -> None:
    with h5py.File(file, "r+") as content:
        content["Data.Delay"][...] = [[0.0, 2.5, 0.0, 0.0, 1.0]]
        content["ListenerView"][...] = [[0.0, 1.0, 0.0]]
    read, plain = read_sofa(file), free_field(circle(4))
    at = int(np.argmin(np.abs(np.degrees(plain.azimuth) - 90.0)))
    assert read.azimuth[at] == pytest.approx(0.0, abs=1e-9)
    f = np.array([500.0, 2000.0])
    late = read.spectrum(0.0, 0.0, f) / plain.spectrum(np.pi / 2, 0.0, f)
    assert np.angle(late[:, 1]) == pytest.approx(-2 * np.pi * f * 2.5 / RATE, abs=1e-3)
    assert np.abs(late) == pytest.approx(np.ones((2, 5)), abs=1e-3)


def test_cartesian_sources(file: Path) -> None:
    plain = read_sofa(file)
    vectors = 2.0 * np.stack([np.cos(plain.azimuth), np.sin(plain.azimuth), np.zeros(36)], axis=1)
    with h5py.File(file, "r+") as content:
        content["SourcePosition"][...] = vectors
        content["SourcePosition"].attrs["Type"] = np.bytes_("cartesian")
        content["SourcePosition"].attrs["Units"] = np.bytes_("metre")
    again = read_sofa(file)
    assert np.exp(1j * again.azimuth) == pytest.approx(np.exp(1j * plain.azimuth))
    assert again.distance_m == pytest.approx(2.0)


def attribute(owner: str, name: str, value: str) -> Callable[[h5py.File], None]:
    def change(content: h5py.File) -> None:
        (content[owner] if owner else content).attrs[name] = np.bytes_(value)

    return change


def drop(name: str) -> Callable[[h5py.File], None]:
    def change(content: h5py.File) -> None:
        del content[name]

    return change


def fill(name: str, value: float) -> Callable[[h5py.File], None]:
    def change(content: h5py.File) -> None:
        content[name][...] = value

    return change


@pytest.mark.parametrize(
    ("change", "what"),
    [
        (attribute("", "Conventions", "HRTF"), "not SOFA"),
        (attribute("", "SOFAConventions", "SimpleHeadphoneIR"), "convention SimpleHeadphoneIR is not read"),
        (attribute("", "DataType", "TF"), "DataType TF"),
        (attribute("SourcePosition", "Units", "radian, radian, metre"), "spherical in radian"),
        (attribute("ReceiverPosition", "Units", "centimetre"), "cartesian in centimetre"),
        (attribute("Data.SamplingRate", "Units", "kilohertz"), "one rate in hertz"),
        (drop("SourcePosition"), "SourcePosition is missing"),
        (drop("ReceiverPosition"), "ReceiverPosition is missing"),
        (drop("Data.IR"), "Data.IR is missing"),
        (fill("SourcePosition", np.nan), "coordinates are missing"),
        (fill("SourcePosition", 0.0), "coordinates are missing"),
        (fill("SourcePosition", 1.0), "coordinates are missing"),
        (fill("Data.IR", np.inf), "not finite"),
        (fill("ReceiverPosition", 0.0), "stand at the same place"),
        (fill("Data.Delay", -1.0), "from zero up"),
    ],
)
def test_what_is_wrong_with_a_file(file: Path, change: Callable[[h5py.File], None], what: str) -> None:
    with h5py.File(file, "r+") as content:
        change(content)
    with pytest.raises(InputError, match=what) as caught:
        Array.load(file)
    assert str(file) in str(caught.value) and "\n" not in str(caught.value)


def test_files_that_are_none(file: Path, tmp_path: Path) -> None:
    data = file.read_bytes()
    file.write_bytes(data[: len(data) // 2])
    for path in (file, tmp_path / "nothing.sofa"):
        with pytest.raises(FileError, match=r"cut short|no such file"):
            Array.load(path)
    (tmp_path / "text.sofa").write_text("hello")
    with pytest.raises(FileError, match="not a SOFA file"):
        Array.load(tmp_path / "text.sofa")
