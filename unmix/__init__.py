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
    from unmix.jobs.calibrate import calibrate, calibrate_blindly, calibrate_level, measure_responses
    from unmix.jobs.calibration import Calibration
    from unmix.jobs.check import check
    from unmix.jobs.findings import Checked
    from unmix.jobs.grade import grade, grade_files, grade_scene
    from unmix.jobs.grade_real import AloneGrades, CloseGrades, grade_alone, grade_close
    from unmix.jobs.limits import Limits, LimitsOptions
    from unmix.jobs.limits import limits as array_limits
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
    from unmix.report.figures import bearing_figure, save_figure
    from unmix.report.page import PageFile
    from unmix.report.scene_figures import conditioning_figure, scene_figure, verdict_figure
    from unmix.report.spectrogram import spectrogram_figure
    from unmix.report.write import write_report
    from unmix.scene import Scene, Talker
    from unmix.sofa import Responses, read_sofa, write_sofa
    from unmix.track import Orientation, Track
    from unmix.variant import Variant, load_variant

__all__ = [
    "AloneGrades",
    "Array",
    "BatchResult",
    "Calibration",
    "Checked",
    "CloseGrades",
    "FileError",
    "Grades",
    "InputError",
    "Limits",
    "LimitsOptions",
    "LiveSeparator",
    "Located",
    "MissingExtraError",
    "Orientation",
    "PageFile",
    "Recording",
    "RenderSpec",
    "Rendered",
    "RenderedScene",
    "Responses",
    "Scene",
    "Solution",
    "Talker",
    "Track",
    "UnmixError",
    "UnmixWarning",
    "UnsolvableError",
    "Variant",
    "__version__",
    "array_limits",
    "bearing_figure",
    "calibrate",
    "calibrate_blindly",
    "calibrate_level",
    "check",
    "conditioning_figure",
    "export_bank",
    "grade",
    "grade_alone",
    "grade_close",
    "grade_files",
    "grade_scene",
    "load_variant",
    "locate",
    "measure_responses",
    "read_audio",
    "read_bank",
    "read_sofa",
    "render_scene",
    "render_to_folder",
    "run_batch",
    "save_figure",
    "scene_figure",
    "solve",
    "solve_to_folder",
    "spectrogram_figure",
    "verdict_figure",
    "write_audio",
    "write_report",
    "write_sofa",
]

_LAZY = {
    "AloneGrades": "unmix.jobs.grade_real",
    "Array": "unmix.array",
    "BatchResult": "unmix.batch.run",
    "Calibration": "unmix.jobs.calibration",
    "Checked": "unmix.jobs.findings",
    "CloseGrades": "unmix.jobs.grade_real",
    "Grades": "unmix.metrics.grades",
    "Limits": "unmix.jobs.limits",
    "LimitsOptions": "unmix.jobs.limits",
    "LiveSeparator": "unmix.live.separator",
    "Located": "unmix.jobs.located",
    "Orientation": "unmix.track",
    "PageFile": "unmix.report.page",
    "Recording": "unmix.audio",
    "RenderSpec": "unmix.render.spec",
    "Rendered": "unmix.jobs.render",
    "RenderedScene": "unmix.render.compose",
    "Responses": "unmix.sofa",
    "Scene": "unmix.scene",
    "Solution": "unmix.jobs.solution",
    "Talker": "unmix.scene",
    "Track": "unmix.track",
    "Variant": "unmix.variant",
    # `unmix.limits` is a folder too.
    "array_limits": "unmix.jobs.limits:limits",
    "bearing_figure": "unmix.report.figures",
    "calibrate": "unmix.jobs.calibrate",
    "calibrate_blindly": "unmix.jobs.calibrate",
    "calibrate_level": "unmix.jobs.calibrate",
    "check": "unmix.jobs.check",
    "conditioning_figure": "unmix.report.scene_figures",
    "export_bank": "unmix.export.job",
    "grade": "unmix.jobs.grade",
    "grade_alone": "unmix.jobs.grade_real",
    "grade_close": "unmix.jobs.grade_real",
    "grade_files": "unmix.jobs.grade",
    "grade_scene": "unmix.jobs.grade",
    "load_variant": "unmix.variant",
    "locate": "unmix.jobs.locate",
    "measure_responses": "unmix.jobs.calibrate",
    "read_audio": "unmix.audio",
    "read_bank": "unmix.export.files",
    "read_sofa": "unmix.sofa",
    "render_scene": "unmix.render.compose",
    # `unmix.render` is the folder of that stage; the job goes by the name of what it does.
    "render_to_folder": "unmix.jobs.render:render",
    "run_batch": "unmix.batch.run",
    "save_figure": "unmix.report.figures",
    "scene_figure": "unmix.report.scene_figures",
    "solve": "unmix.jobs.solve",
    "solve_to_folder": "unmix.jobs.solve",
    "spectrogram_figure": "unmix.report.spectrogram",
    "verdict_figure": "unmix.report.scene_figures",
    "write_audio": "unmix.audio",
    "write_report": "unmix.report.write",
    "write_sofa": "unmix.sofa",
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
