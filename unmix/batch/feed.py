"""What to do next: scenes are rendered before their items, and a worker stays with its scene while it can."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable
from dataclasses import dataclass

from unmix.batch.items import Items
from unmix.batch.store import Store
from unmix.batch.work import Task

__all__ = ["Feed", "Job", "Outcome", "Running", "task_of"]


@dataclass(frozen=True)
class Job:
    """One thing for a worker: render scene `scene` (`item` None), or do item `item` of it."""

    scene: int
    item: int | None = None


@dataclass(frozen=True)
class Outcome:
    """One item that has ended; `error` is None when it is done."""

    item: int
    error: str | None = None


@dataclass(frozen=True)
class Running:
    """Something in the works: what, where, and since when."""

    name: str
    where: str
    seconds: float


def task_of(items: Items, index: int, path: str) -> Task:
    """What a worker must know of an item whose scene's file is `path`."""
    scene, variant = items.place(index)
    source = items.scenes[scene]
    return Task(
        key=items.key(index),
        name=items.name(index),
        digest=source.digest,
        path=path,
        stamps=source.stamps,
        variant=items.variants[variant],
        against=items.against,
        metrics=items.metrics,
    )


class Feed:
    """Hands out jobs for the `pending` items of a batch."""

    def __init__(self, items: Items, pending: Iterable[int], store: Store) -> None:
        self._items, self._store = items, store
        self._left: dict[int, deque[int]] = {}
        for index in pending:
            self._left.setdefault(items.place(index)[0], deque()).append(index)
        self._paths: dict[int, str] = {}
        self._looked: set[int] = set()
        self._rendering: set[int] = set()

    def next(self, scene: int | None, busy: set[int]) -> Job | None:
        """A job for a worker whose last scene was `scene`, the others being at the scenes in `busy`; None: wait.

        In this order: its own scene, a scene that nobody is at, a scene to render, somebody else's scene.
        """
        if scene is not None and scene in self._left and scene in self._paths:
            return self._item(scene)
        shared: int | None = None
        for other in self._left:
            if other in self._rendering:
                continue
            if not self._ready(other):
                self._rendering.add(other)
                return Job(other)
            if other not in busy:
                return self._item(other)
            shared = other if shared is None else shared
        return None if shared is None else self._item(shared)

    def _ready(self, scene: int) -> bool:
        if scene not in self._looked:
            self._looked.add(scene)
            if (path := self._store.scene_path(self._items.scenes[scene])) is not None:
                self._paths[scene] = str(path)
        return scene in self._paths

    def _item(self, scene: int) -> Job:
        return Job(scene, self.take(scene))

    def path(self, scene: int) -> str:
        """The file of a scene that is ready."""
        return self._paths[scene]

    def rendered(self, scene: int, path: str) -> None:
        """A scene has been rendered."""
        self._rendering.discard(scene)
        self._paths[scene] = path

    def unrendered(self, scene: int) -> list[int]:
        """A scene could not be rendered: its items, taken out."""
        self._rendering.discard(scene)
        return list(self._left.pop(scene, ()))

    def put_back(self, job: Job) -> None:
        """A job whose worker is gone."""
        if job.item is None:
            self._rendering.discard(job.scene)
        else:
            self._left.setdefault(job.scene, deque()).appendleft(job.item)

    def take(self, scene: int) -> int:
        """Take out the scene's first item, which is the one put back last."""
        left = self._left[scene]
        item = left.popleft()
        if not left:
            del self._left[scene]
        return item

    @property
    def empty(self) -> bool:
        """Whether everything has been handed out."""
        return not self._left
