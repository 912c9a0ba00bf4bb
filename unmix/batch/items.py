"""The work items of a batch: every scene with every variant, each with a key made of all its result depends on."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from unmix.batch.digests import Digests, digest_of, numerics_version
from unmix.batch.metrics import OwnMetric, own_metrics
from unmix.batch.plan import Plan
from unmix.batch.scenes import SceneSource, count_scenes, plan_scenes
from unmix.batch.variants import count_variants, plan_variants
from unmix.errors import InputError
from unmix.variant import Variant

__all__ = ["MANY", "Items", "count_items", "plan_items"]

FORMAT = 1
"""Of the parts' content; raised when the figures in them change their meaning."""
MANY = 5_000
"""A plan of more items than this is run only when that is confirmed."""


@dataclass(frozen=True)
class Items:
    """The items, scene by scene; `index` counts them, scene s with variant v being s * len(variants) + v.

    context  digest of what all items depend on: numerics, kind of reference, the user's metrics
    """

    scenes: tuple[SceneSource, ...]
    variants: tuple[Variant, ...]
    metrics: tuple[OwnMetric, ...]
    against: str | None
    context: str
    settings: tuple[str, ...]

    def __len__(self) -> int:
        return len(self.scenes) * len(self.variants)

    def place(self, index: int) -> tuple[int, int]:
        """Scene and variant of an item, as indices."""
        return divmod(index, len(self.variants))

    def key(self, index: int) -> str:
        """The item's key: two items with one key have one result."""
        scene, variant = self.place(index)
        return digest_of(self.context, self.scenes[scene].digest, self.settings[variant])

    def name(self, index: int) -> str:
        """Scene and variant, for people."""
        scene, variant = self.place(index)
        return f"{self.scenes[scene].name} x {self.variants[variant].name}"

    def distinct(self) -> Iterator[int]:
        """Indices of items, the first of each key only: settings or scenes may stand twice under two names."""
        variants = _firsts(self.settings)
        for s in _firsts([scene.digest for scene in self.scenes]):
            yield from (s * len(self.variants) + v for v in variants)


def _firsts(digests: Sequence[str]) -> list[int]:
    """Indices at which a digest stands for the first time."""
    first: dict[str, int] = {}
    for index, digest in enumerate(digests):
        first.setdefault(digest, index)
    return list(first.values())


def count_items(plan: Plan, base: Path) -> int:
    """How many items the plan stands for, counted without making them."""
    return count_scenes(plan, base) * count_variants(plan, base)


def plan_items(plan: Plan, path: Path) -> Items:
    """Every item of the plan read from `path`. Raises InputError or FileError naming file, key and remedy."""
    base = path.parent
    try:
        scenes, variants = plan_scenes(plan, base), plan_variants(plan, base)
    except InputError as error:
        raise InputError(f"{path}: {error}" if str(path) not in str(error) else str(error)) from None
    metrics = own_metrics(plan.metric, base, Digests())
    context = digest_of(FORMAT, numerics_version(), plan.against, [(m.name, m.function, m.digest) for m in metrics])
    return Items(
        tuple(scenes), tuple(variants), metrics, plan.against, context, tuple(digest_of(_settings(v)) for v in variants)
    )


def _settings(variant: Variant) -> dict[str, Any]:
    """What a variant does, whatever it is called."""
    return {k: v for k, v in variant.to_dict().items() if k not in ("name", "summary", "base")}
