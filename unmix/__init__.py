"""Separate the talkers of a small microphone array's recording, and prove how much clearer each became.

    >>> import unmix
    >>> scene = unmix.Scene.load("scene.toml")
    >>> result = unmix.solve(scene)                      # result.signals: (talkers, samples)
    >>> grades = unmix.grade(result.signals, references, sample_rate=16000)

Arrays in, arrays out; audio is (channels, samples) or (talkers, samples) with full scale 1.0. Names are imported when
they are first used, so that `import unmix` costs nothing.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from unmix.errors import FileError, InputError, MissingExtraError, UnmixError, UnmixWarning, UnsolvableError
from unmix.version import __version__

if TYPE_CHECKING:
    from unmix.array import Array
    from unmix.audio import Recording, read_audio, write_audio
    from unmix.batch.run import BatchResult, run_batch
    from unmix.export.files import read_bank
    from unmix.export.job import export_bank
    from unmix.jobs.grade import grade, grade_files, grade_scene
    from unmix.jobs.grade_real import AloneGrades, CloseGrades, grade_alone, grade_close
    from unmix.jobs.locate import locate
    from unmix.jobs.located import Located
    from unmix.jobs.render import Rendered
    from unmix.jobs.render import render as render_to_folder
    from unmix.jobs.solution import Solution
    from unmix.jobs.solve import solve, solve_to_folder
    from unmix.live.separator import LiveSeparator
    from unmix.metrics.grades import Grades
    from unmix.render.compose import RenderedScene, render_scene
    from unmix.render.spec import RenderSpec
    from unmix.scene import Scene, Talker
    from unmix.track import Orientation, Track
    from unmix.variant import Variant, load_variant

__all__ = [
    "AloneGrades",
    "Array",
    "BatchResult",
    "CloseGrades",
    "FileError",
    "Grades",
    "InputError",
    "LiveSeparator",
    "Located",
    "MissingExtraError",
    "Orientation",
    "Recording",
    "RenderSpec",
    "Rendered",
    "RenderedScene",
    "Scene",
    "Solution",
    "Talker",
    "Track",
    "UnmixError",
    "UnmixWarning",
    "UnsolvableError",
    "Variant",
    "__version__",
    "export_bank",
    "grade",
    "grade_alone",
    "grade_close",
    "grade_files",
    "grade_scene",
    "load_variant",
    "locate",
    "read_audio",
    "read_bank",
    "render_scene",
    "render_to_folder",
    "run_batch",
    "solve",
    "solve_to_folder",
    "write_audio",
]

_LAZY = {
    "AloneGrades": "unmix.jobs.grade_real",
    "Array": "unmix.array",
    "BatchResult": "unmix.batch.run",
    "CloseGrades": "unmix.jobs.grade_real",
    "Grades": "unmix.metrics.grades",
    "LiveSeparator": "unmix.live.separator",
    "Located": "unmix.jobs.located",
    "Orientation": "unmix.track",
    "Recording": "unmix.audio",
    "RenderSpec": "unmix.render.spec",
    "Rendered": "unmix.jobs.render",
    "RenderedScene": "unmix.render.compose",
    "Scene": "unmix.scene",
    "Solution": "unmix.jobs.solution",
    "Talker": "unmix.scene",
    "Track": "unmix.track",
    "Variant": "unmix.variant",
    "export_bank": "unmix.export.job",
    "grade": "unmix.jobs.grade",
    "grade_alone": "unmix.jobs.grade_real",
    "grade_close": "unmix.jobs.grade_real",
    "grade_files": "unmix.jobs.grade",
    "grade_scene": "unmix.jobs.grade",
    "load_variant": "unmix.variant",
    "locate": "unmix.jobs.locate",
    "read_audio": "unmix.audio",
    "read_bank": "unmix.export.files",
    "render_scene": "unmix.render.compose",
    # `unmix.render` is the folder of that stage; the job goes by the name of what it does.
    "render_to_folder": "unmix.jobs.render:render",
    "run_batch": "unmix.batch.run",
    "solve": "unmix.jobs.solve",
    "solve_to_folder": "unmix.jobs.solve",
    "write_audio": "unmix.audio",
}


def __getattr__(name: str) -> Any:
    if name not in _LAZY:
        raise AttributeError(f"module 'unmix' has no attribute {name!r}")
    import importlib

    module, _, attribute = _LAZY[name].partition(":")
    found = getattr(importlib.import_module(module), attribute or name)
    globals()[name] = found
    return found


def __dir__() -> list[str]:
    return sorted(__all__)
