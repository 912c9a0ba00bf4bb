"""Trade-offs at a glance for `limits` and `export`: measured with progress, as a table and a picture."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from unmix.cli.common import print_table, progress_bar, say

if TYPE_CHECKING:
    from unmix.array import Array
    from unmix.export.tradeoffs import Tradeoffs
    from unmix.scene import Talker

__all__ = ["check_picture", "measured_tradeoffs", "print_tradeoffs", "save_tradeoffs"]

LOSS_DB = 1.0


def check_picture(path: Path, *, overwrite: bool) -> None:
    """Raise before the work when the picture could not be written."""
    from unmix.files import refuse_to_replace
    from unmix.report.figures import check_format

    check_format(path)
    refuse_to_replace(path, overwrite=overwrite)


def measured_tradeoffs(array: Array, talkers: Sequence[Talker], **options: Any) -> Tradeoffs:
    """`measure_tradeoffs` with a bar."""
    from unmix.export.tradeoffs import measure_tradeoffs

    with progress_bar("measuring presets") as report:
        return measure_tradeoffs(array, talkers, progress=report, **options)


def save_tradeoffs(found: Tradeoffs, path: Path, *, overwrite: bool) -> None:
    """Write the picture."""
    from unmix.report.figures import save_figure, tradeoff_figure

    save_figure(tradeoff_figure(found), path, overwrite=overwrite)


def print_tradeoffs(found: Tradeoffs) -> None:
    """One line per preset."""
    from unmix.cli.tables import number, plain_table

    room = "no room" if found.t20_s is None else f"a room with T20 {found.t20_s:g} s"
    columns = [
        ("variant", "left"),
        ("SIR\nbest, dB", "right"),
        ("STOI\nthere", "right"),
        ("latency\nms", "right"),
        ("work\nmillion MAC/s", "right"),
        ("word\nbits", "right"),
    ]
    none = number(None, 0)
    rows = [["unprocessed", number(found.unprocessed_sir_db, 1), number(found.unprocessed_stoi, 2), none, none, none]]
    for variant in found.variants:
        s = found.summary(variant, loss_db=LOSS_DB)
        work = None if s.mac_per_s is None else 1e-6 * s.mac_per_s
        least = [number(s.latency_ms, 1), number(work, 1), number(s.bits, 0)]
        rows.append([variant, number(s.best_db, 1), number(s.stoi, 2), *least])
    say(f"Presets for a device, the worst talker on rendered speech in {room}:")
    print_table(plain_table(columns, rows))
    say(f"Latency, work and word: the least that comes within {LOSS_DB:g} dB of the variant's best SIR.")
