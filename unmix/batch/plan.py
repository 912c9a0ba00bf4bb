"""The plan file: which scenes, which variants, what is measured. Strict TOML; paths are relative to the file.

`unmix batch --explain` prints every field.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Annotated, Literal

import msgspec
from msgspec import Meta

from unmix.errors import InputError
from unmix.files import read_toml
from unmix.metrics.grades import FIGURES
from unmix.metrics.speech_figures import SPEECH_FIGURES

__all__ = [
    "MetricTable",
    "Plan",
    "RandomSeats",
    "RenderTable",
    "RoomTable",
    "ScoresTable",
    "SeatsTable",
    "VaryTable",
    "refuse_namesakes",
]

Share = Annotated[float, Meta(gt=0.0, le=1.0)]


class _Strict(msgspec.Struct, forbid_unknown_fields=True, kw_only=True, frozen=True):
    pass


class RoomTable(_Strict, kw_only=True, frozen=True):
    """`[[render.rooms]]`: a room in place of the spec's; what is left out stays as the spec has it."""

    name: Annotated[str, Meta(min_length=1, description="name of the room in tables")]
    size_m: Annotated[
        Annotated[list[float], Meta(min_length=3, max_length=3)] | None, Meta(description="length, width, height")
    ] = None
    t20_s: Annotated[
        Annotated[float, Meta(ge=0.05, le=5.0)] | None, Meta(description="reverberation time to be measured")
    ] = None
    absorption: Annotated[Share | None, Meta(description="energy the walls absorb, instead of t20_s")] = None


class SeatsTable(_Strict, kw_only=True, frozen=True):
    """`[[render.seats]]`: where the spec's talkers sit, one value per talker in the spec's order."""

    name: Annotated[str, Meta(min_length=1, description="name of the seating in tables")]
    azimuth_deg: Annotated[list[float], Meta(min_length=1, description="bearing of each talker")]
    elevation_deg: Annotated[list[float] | None, Meta(description="elevation of each; default: the spec's")] = None
    distance_m: Annotated[list[float] | None, Meta(description="distance of each; default: the spec's")] = None


class RandomSeats(_Strict, kw_only=True, frozen=True):
    """`[render.random_seats]`: bearings and distances drawn anew for each seed."""

    least_apart_deg: Annotated[float, Meta(ge=0.0, le=120.0, description="least angle between talkers")] = 40.0
    distance_m: Annotated[
        list[Annotated[float, Meta(ge=0.1, le=100.0)]],
        Meta(min_length=2, max_length=2, description="shortest and longest distance"),
    ] = msgspec.field(default_factory=lambda: [1.0, 1.5])


class RenderTable(_Strict, kw_only=True, frozen=True):
    """`[[render]]`: scenes to be rendered: rooms x seats x SNR x seeds of one rendering spec."""

    spec: Annotated[str, Meta(description="rendering spec (TOML), see `unmix render --explain`")]
    name: Annotated[str, Meta(description="name in tables; default: the spec file's")] = ""
    seeds: Annotated[
        Annotated[int, Meta(ge=1)] | list[Annotated[int, Meta(ge=0)]] | None,
        Meta(description="seeds, or how many of them, from 0; default: the spec's"),
    ] = None
    snr_db: Annotated[
        list[Annotated[float, Meta(ge=-20.0, le=120.0)]] | None,
        Meta(description="levels of the quietest talker over the noise; default: the spec's"),
    ] = None
    snr_of: Annotated[Literal["sensor", "diffuse"], Meta(description="the noise that snr_db sets")] = "sensor"
    rooms: Annotated[list[RoomTable], Meta(description="rooms; default: the spec's")] = []
    seats: Annotated[list[SeatsTable], Meta(description="seatings; default: the spec's")] = []
    random_seats: Annotated[RandomSeats | None, Meta(description="draw seats from each seed, instead of seats")] = None


class VaryTable(_Strict, kw_only=True, frozen=True):
    """`[[vary]]`: fields of a variant to run through."""

    base: Annotated[str, Meta(description="preset or variant file that the fields change")]
    fields: Annotated[
        dict[str, Annotated[list[bool | int | float | str], Meta(min_length=1)]],
        Meta(min_length=1, description='values by field, e.g. "model.order" = [4, 8]; see `unmix variants`'),
    ]
    how: Annotated[
        Literal["grid", "paired"], Meta(description="grid: every combination; paired: first with first, and so on")
    ] = "grid"


class MetricTable(_Strict, kw_only=True, frozen=True):
    """`[[metric]]`: a metric of your own: function(estimate, reference, sample_rate) -> number or None.

    Both signals are (samples,), aligned in time. It is also asked about the unprocessed microphone, for the gain.
    """

    name: Annotated[str, Meta(pattern="^[a-z][a-z0-9_]*$", description="column in the results")]
    file: Annotated[str, Meta(description="Python file that holds the function")]
    function: Annotated[str, Meta(description="its name; default: the metric's")] = ""
    higher_is_better: Annotated[bool, Meta(description="whether large values are good")] = True


class ScoresTable(_Strict, kw_only=True, frozen=True):
    """`[[scores]]`: scores from listeners or a speech recogniser, as CSV.

    Columns scene, variant, talker (optional), and the scores; several lines for one signal are averaged.
    """

    file: Annotated[str, Meta(description="CSV file")]
    lower_is_better: Annotated[list[str], Meta(description="columns in which small values are good")] = []


class Plan(_Strict, kw_only=True, frozen=True):
    """A plan as it stands in a TOML file."""

    title: Annotated[str, Meta(description="title of the batch")] = ""
    scenes: Annotated[
        list[str], Meta(description='scene files; patterns such as "takes/*/scene.toml" are filled in')
    ] = []
    render: Annotated[list[RenderTable], Meta(description="scenes to be rendered")] = []
    variants: Annotated[
        list[str], Meta(description='presets and variant files; patterns such as "variants/*.toml" are filled in')
    ] = []
    vary: Annotated[list[VaryTable], Meta(description="fields to vary")] = []
    metrics: Annotated[
        list[str],
        Meta(
            min_length=1,
            description="figures whose gains are analysed, or leakage_alone_db, or scores; the first one ranks",
        ),
    ] = msgspec.field(default_factory=lambda: ["stoi", "sir_db", "sdr_db"])
    against: Annotated[
        Literal["early", "image", "dry", "plain"] | None,
        Meta(description="kind of reference; default: the first the talkers have"),
    ] = None
    seed: Annotated[int, Meta(ge=0, description="of the resampling behind the intervals")] = 0
    metric: Annotated[list[MetricTable], Meta(description="metrics of your own")] = []
    scores: Annotated[list[ScoresTable], Meta(description="scores from outside")] = []

    @classmethod
    def load(cls, path: str | Path) -> Plan:
        """Read a plan. Raises FileError or InputError naming file, key and remedy."""
        path = Path(path)
        plan = read_toml(path, cls)
        _check(plan, path)
        return plan


def _check(plan: Plan, path: Path) -> None:
    if not plan.scenes and not plan.render:
        raise InputError(f"{path}: names no scenes; add `scenes` (files) or [[render]] tables")
    if not plan.variants and not plan.vary:
        raise InputError(f"{path}: names no variants; add `variants` or [[vary]] tables")
    for index, table in enumerate(plan.render):
        if table.seats and table.random_seats is not None:
            raise InputError(f"{path}: key `render[{index}]`: both seats and random_seats are given; keep one")
    for index, vary in enumerate(plan.vary):
        counts = {name: len(values) for name, values in vary.fields.items()}
        if vary.how == "paired" and len(set(counts.values())) > 1:
            said = ", ".join(f"{name} {count}" for name, count in counts.items())
            raise InputError(f"{path}: key `vary[{index}].fields`: paired lists of different lengths ({said})")
    names = [metric.name for metric in plan.metric]
    for name in names:
        if name in (*FIGURES, *SPEECH_FIGURES, "leakage_alone_db") or names.count(name) > 1:
            raise InputError(f"{path}: key `metric`: {name!r} is taken; choose another name")


def refuse_namesakes(what: str, names: Sequence[str], remedy: str) -> None:
    """Raise InputError when two of a plan's scenes or variants have one name: rows are told apart by it."""
    taken: set[str] = set()
    for name in names:
        if name in taken:
            raise InputError(f"two {what} are called {name!r}; {remedy}")
        taken.add(name)
