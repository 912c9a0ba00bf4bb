"""The health check's findings, for the report: of the whole recording, or of what is shown of a long one."""

from __future__ import annotations

from dataclasses import dataclass, replace

from unmix.audio import Recording
from unmix.errors import UnmixError
from unmix.jobs.check import check
from unmix.jobs.findings import Finding, surely
from unmix.report.material import SceneMaterial
from unmix.report.scene_sound import SceneSound

__all__ = ["Health", "health_of"]

LONGEST_S = 600.0
"""Longer recordings are looked at where they are shown: the check reads every channel from end to end."""


@dataclass(frozen=True)
class Health:
    """Findings, and what was looked at in words. `surely` of each stands beside it."""

    findings: tuple[tuple[Finding, str], ...]
    of: str

    @property
    def warnings(self) -> list[str]:
        """What the reader must know, one line each."""
        return [f"{f.what} ({f.where}): {f.remedy}" for f, _ in self.findings if f.severity != "note"]


def health_of(material: SceneMaterial, sound: SceneSound | None) -> Health | None:
    """Check the scene's recording; None where it is out of reach."""
    scene = material.scene
    if scene is None or sound is None:
        return None
    of = "the whole recording"
    if scene.recording.duration_s > LONGEST_S and isinstance(scene.recording, Recording):
        rate = scene.sample_rate
        first = scene.recording.start + round(sound.start_s * rate)
        stop = min(first + round(sound.seconds * rate), scene.recording.stop)
        scene = replace(scene, recording=replace(scene.recording, start=first, stop=stop))
        of = "the stretch shown above"
    try:
        found = check(scene)
    except UnmixError as error:
        return Health((), f"nothing, for it cannot be checked: {error}")
    return Health(tuple((finding, surely(finding.confidence)) for finding in found.findings), of)
