"""`unmix live`: audio from standard input, chunk by chunk, one channel per talker to standard output."""

from __future__ import annotations

import contextlib
import os
import sys
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO

import click

from unmix.cli.common import consent_line, existing_file, json_option, overwrite_option, print_json
from unmix.cli.presets import complete_variant
from unmix.cli.seats import bearing_option, who_and_where

if TYPE_CHECKING:
    from unmix.array import Array
    from unmix.live.meter import Meter
    from unmix.live.pipe import PipeFormat, PipeReader
    from unmix.live.separator import LiveSeparator
    from unmix.scene import Scene, Talker

__all__ = ["command"]

RAW = ["s16le", "s24le", "s32le", "f32le", "f64le"]
IN_PART = 3
_TOLD_SHARE = 1e-4


@click.command("live")
@click.argument("source", metavar="SCENE_OR_ARRAY", type=existing_file)
@bearing_option
@click.option(
    "--variant",
    default="low-latency",
    show_default=True,
    shell_complete=complete_variant,
    metavar="NAME_OR_FILE",
    help="A preset or a variant file that can run chunk by chunk.",
)
@click.option("--format", "kind", type=click.Choice(["wav", *RAW]), default="wav", help="What comes in (default: WAV).")
@click.option("--rate", type=int, metavar="HZ", help="Sample rate of raw samples.")
@click.option("--channels", type=int, metavar="N", help="Interleaved channels of raw samples.")
@click.option("--output-format", type=click.Choice(["wav", *RAW]), help="What goes out (default: as what comes in).")
@click.option("--output", type=existing_file, metavar="FILE", help="Write here instead of to standard output.")
@click.option("--chunk-ms", type=click.FloatRange(0.05, 1000.0), default=2.0, show_default=True, help="Chunk length.")
@click.option(
    "--lookahead-ms",
    type=click.FloatRange(0.0, 1000.0),
    help="Most that filters see of the future, which is the latency (default: all that they need).",
)
@click.option("--aligned", is_flag=True, help="Leave out the latency's samples: output as long as the input.")
@click.option(
    "--state",
    type=existing_file,
    metavar="FILE",
    help="Go on from this file if it exists; keep the state in it, chunk by chunk.",
)
@click.option(
    "--report-s", type=click.FloatRange(min=0.1), default=60.0, show_default=True, help="Seconds between reports."
)
@overwrite_option
@json_option
def command(**options: Any) -> int | None:
    """Separate talkers while they speak: audio in by standard input, one channel per talker out.

    SCENE_OR_ARRAY is a scene file, whose array and talkers are taken (its recording is not; talkers with a track are
    followed), or an array file with --bearing for each talker. Reports go to standard error. With --json the audio goes
    to --output, and one JSON object with latency, cost and under-runs to standard output.
    """
    return _run(**options)


def _run(
    source: Path,
    bearings: Sequence[str],
    variant: str,
    kind: str,
    rate: int | None,
    channels: int | None,
    output_format: str | None,
    output: Path | None,
    chunk_ms: float,
    lookahead_ms: float | None,
    aligned: bool,
    state: Path | None,
    report_s: float,
    overwrite: bool,
    as_json: bool,
) -> int | None:
    from unmix.live.carry import carry
    from unmix.live.pipe import PipeFormat, PipeReader, PipeWriter

    if as_json and output is None:
        raise click.UsageError("--json needs --output FILE: standard output cannot carry both")
    array, talkers, scene = who_and_where(source, bearings)
    stream = _incoming_stream()
    sound, announced = _incoming(stream, kind, rate, channels, None if scene is None else scene.sample_rate)
    picked = _picked(sound, array, scene)
    separator = _separator(array, talkers, scene, variant, sound.sample_rate, lookahead_ms)
    chunk = max(1, round(chunk_ms * 1e-3 * sound.sample_rate))
    measured = separator.measure_latency()
    if not as_json:
        _tell_start(separator, sound, chunk, measured)
    wav = (output_format or kind) == "wav"
    out_kind: Any = sound.kind if output_format in (None, "wav") else output_format
    reader = PipeReader(stream, sound, announced)
    with _outgoing(output, overwrite) as out:
        where = "standard output" if output is None else str(output)
        writer = PipeWriter(
            out, PipeFormat(out_kind, sound.sample_rate, len(separator.talkers)), header=wav, where=where
        )
        meter = carry(
            separator, reader, writer, chunk=chunk, channels=picked, aligned=aligned, state=state,
            every=None if as_json else _tell, every_s=report_s,
        )  # fmt: skip
    if as_json:
        print_json(_tree(separator, sound, chunk, measured, meter, reader, writer.clipped))
    else:
        _tell(meter)
        _tell_end(reader, writer.clipped)
    return IN_PART if reader.short else None


def _incoming(
    stream: BinaryIO, kind: Any, rate: int | None, channels: int | None, scene_rate: int | None
) -> tuple[PipeFormat, int | None]:
    """The format of what comes in; what options, header and scene say of it must agree."""
    from unmix.errors import InputError
    from unmix.live.pipe import checked_format, read_wav_header

    announced = None
    if kind == "wav":
        sound, announced = read_wav_header(stream)
    elif channels is None or (rate or scene_rate) is None:
        raise click.UsageError(f"--format {kind} needs --rate and --channels: raw samples say neither")
    else:
        sound = checked_format(kind, rate or scene_rate or 0, channels, "--rate")
    for what, wanted in (("--rate", rate), ("the scene's recording", scene_rate)):
        if wanted is not None and wanted != sound.sample_rate:
            raise InputError(
                f"standard input: {sound.sample_rate} Hz, but {what} has {wanted} Hz; resample one of them"
            )
    if channels is not None and channels != sound.channels:
        raise InputError(f"standard input: {sound.channels} channels, but --channels says {channels}; correct it")
    return sound, announced


def _picked(sound: PipeFormat, array: Array, scene: Scene | None) -> tuple[int, ...] | None:
    """Which of the stream's channels are the array's; all of them when None."""
    from unmix.errors import InputError

    if sound.channels == array.channels:
        return None
    chosen = () if scene is None else tuple(scene.recording.channels)
    if chosen and max(chosen) < sound.channels:
        return chosen
    raise InputError(
        f"standard input: {sound.channels} channels for an array of {array.channels} microphones; send those of the "
        "array, or set `channels` in the scene's [recording]"
    )


def _separator(
    array: Array,
    talkers: Sequence[Talker],
    scene: Scene | None,
    variant: str,
    sample_rate: int,
    lookahead_ms: float | None,
) -> LiveSeparator:
    from dataclasses import replace

    from unmix.live.separator import LiveSeparator

    lookahead_s = None if lookahead_ms is None else 1e-3 * lookahead_ms
    if scene is not None:
        return LiveSeparator.from_scene(
            replace(scene, talkers=tuple(talkers)), variant, lookahead_s=lookahead_s, wait=False
        )
    return LiveSeparator(array, talkers, variant, sample_rate=sample_rate, lookahead_s=lookahead_s, wait=False)


def _incoming_stream() -> BinaryIO:
    if sys.stdin is None or sys.stdin.isatty():
        raise click.UsageError("standard input is a terminal: pipe audio into this command")
    return sys.stdin.buffer


def _discard_what_is_left() -> None:
    """Keep the interpreter from writing to the closed pipe once more when it ends."""
    with contextlib.suppress(OSError, ValueError):
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


@contextlib.contextmanager
def _outgoing(output: Path | None, overwrite: bool) -> Iterator[BinaryIO]:
    """Standard output, or a file written as the audio comes: what is in it is worth keeping whatever happens."""
    from unmix.errors import FileError
    from unmix.files import refuse_to_replace

    if output is None:
        if sys.stdout.isatty():
            raise click.UsageError(
                "standard output is a terminal: send the audio into a pipe or a file, or give --output"
            )
        try:
            yield sys.stdout.buffer
        except FileError:
            _discard_what_is_left()
            raise
        return
    refuse_to_replace(output, overwrite=overwrite)
    try:
        stream = output.open("wb")
    except OSError as error:
        raise FileError(f"{output}: cannot be written ({error.strerror}); choose another place") from None
    with stream:
        yield stream


def _tell_start(separator: LiveSeparator, sound: PipeFormat, chunk: int, measured: Sequence[int]) -> None:
    rate, late = sound.sample_rate, separator.latency_samples
    names = ", ".join(t.name for t in separator.talkers)
    click.echo(
        f"{len(separator.talkers)} talkers ({names}), variant {separator.variant.name}, {sound.channels} channels at "
        f"{rate} Hz in chunks of {chunk} samples ({1e3 * chunk / rate:.1f} ms)",
        err=True,
    )
    click.echo(
        f"latency {late} samples ({1e3 * late / rate:.1f} ms) as stated, {', '.join(map(str, measured))} as measured "
        f"with an impulse; {1e3 * (late + chunk) / rate:.1f} ms with the chunk itself",
        err=True,
    )
    if separator.cut_share > _TOLD_SHARE and len(separator.talkers) > 1:
        _tell_loss(separator, rate)
    click.echo(consent_line(), err=True)


def _tell_loss(separator: LiveSeparator, rate: int) -> None:
    """What less look-ahead costs in separation, by formula."""
    from unmix.export.sir import predicted_sir_db, speech_spectra

    filters, paths = separator.filters, separator.paths()
    if filters is None:
        return
    spectra = speech_spectra(paths.talkers, rate)
    cut, whole = (predicted_sir_db(f, paths, spectra, rate).min() for f in (filters, separator.whole_filters()))
    click.echo(
        f"the bound on look-ahead leaves {cut:.1f} dB of {whole:.1f} dB SIR to the worst talker, without a room",
        err=True,
    )


def _tell(meter: Meter) -> None:
    runs = "no under-runs" if not meter.under_runs else f"{meter.under_runs} under-runs"
    click.echo(
        f"{meter.samples / meter.sample_rate:.1f} s in {meter.chunks} chunks: {100 * meter.cost:.1f} % of real time, "
        f"longest chunk {1e3 * meter.longest_s:.1f} ms, {runs}",
        err=True,
    )


def _tell_end(reader: PipeReader, clipped: int) -> None:
    if clipped:
        click.echo(f"warning: {clipped} samples beyond full scale were clipped; use --output-format f32le", err=True)
    if reader.short:
        click.echo(f"error: {reader.short}", err=True)


def _tree(
    separator: LiveSeparator,
    sound: PipeFormat,
    chunk: int,
    measured: Sequence[int],
    meter: Meter,
    reader: PipeReader,
    clipped: int,
) -> dict[str, Any]:
    return {
        "talkers": [t.name for t in separator.talkers],
        "variant": separator.variant.name,
        "sample_rate": sound.sample_rate,
        "channels": sound.channels,
        "chunk_samples": chunk,
        "latency_samples": separator.latency_samples,
        "latency_ms": 1e3 * separator.latency_s,
        "latency_measured_samples": list(measured),
        "cut_share": separator.cut_share,
        "clipped": clipped,
        "warnings": [reader.short] if reader.short else [],
        **meter.to_dict(),
    }
