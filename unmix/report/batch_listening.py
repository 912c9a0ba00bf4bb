"""Takes for blind listening from a batch: its telling scenes, separated again by the variants to be compared."""

from __future__ import annotations

import tempfile
import warnings
from collections.abc import Sequence
from pathlib import Path

import msgspec

from unmix.errors import InputError
from unmix.jobs.solve import solve_to_folder
from unmix.report.batch_material import BatchMaterial
from unmix.report.batch_page import telling_scenes
from unmix.report.listening_page import Take, takes_of
from unmix.report.material import material_of_scene
from unmix.scene import Scene
from unmix.variant import Variant

__all__ = ["takes_of_batch"]

USUAL = 3
"""Variants compared unless told otherwise: the best ones."""


def takes_of_batch(
    material: BatchMaterial, *, variants: Sequence[str] = (), scenes: Sequence[str] = (), talkers: Sequence[str] = ()
) -> list[Take]:
    """Every talker of the chosen scenes under the chosen variants.

    variants  by default the three best ones
    scenes    by default those in which the best variant gains most, the median and least
    talkers   by default everybody

    Raises InputError for a name that the batch does not know, FileError for a scene that is gone.
    """
    best = material.winner
    if best is None:
        raise InputError(f"{material.folder}: nothing could be graded, so there is nothing to compare")
    chosen = list(variants) or [v.name for v in material.rankings[material.metrics[0].name][:USUAL]]
    where = list(scenes) or [scene for _, scene in telling_scenes(material, best.name).values()]
    _known(chosen, material.settings, "variant", material.folder)
    _known(where, material.scene_files, "scene", material.folder)
    takes: list[Take] = []
    for name in where:
        scene = Scene.load(material.scene_files[name])
        with tempfile.TemporaryDirectory(prefix="unmix-listening-") as aside, warnings.catch_warnings():
            warnings.simplefilter("ignore")  # what they say stands in the batch's rows
            made = []
            for number, variant in enumerate(chosen):
                folder = Path(aside) / str(number)
                solution = solve_to_folder(scene, folder, msgspec.convert(material.settings[variant], Variant))
                made.append((variant, material_of_scene(scene, folder, solution=solution)))
            present = [t for t in talkers if t in made[0][1].names] if talkers else []
            if not talkers or present:
                takes += [Take(name, t.talker, t.sample_rate, t.conditions) for t in takes_of(made, talkers=present)]
    if not takes:
        raise InputError(f"{material.folder}: none of the scenes has a talker called {', '.join(talkers)}")
    return takes


def _known(names: Sequence[str], known: object, what: str, folder: Path) -> None:
    there = list(known) if isinstance(known, dict) else []
    for name in names:
        if name not in there:
            raise InputError(f"{folder}: there is no {what} {name!r} to listen to, only {', '.join(there) or 'none'}")
