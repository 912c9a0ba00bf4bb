"""Metrics of the user's own: Python functions named in the plan."""

from __future__ import annotations

import importlib.util
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from unmix.batch.digests import Digests
from unmix.batch.plan import MetricTable
from unmix.errors import InputError

__all__ = ["OwnMetric", "own_metrics"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class OwnMetric:
    """One function; `digest` is of the file it stands in."""

    name: str
    file: str
    function: str
    digest: str
    higher_is_better: bool

    def __call__(self, estimate: Floats, reference: Floats, sample_rate: int) -> float | None:
        """The figure; None when it is undefined. Raises InputError when the function returns no number."""
        value = _load(self.file, self.function, self.digest)(estimate, reference, sample_rate)
        if value is None:
            return None
        try:
            number = float(value)
        except (TypeError, ValueError):
            raise InputError(f"{self.file}: {self.function} returned {value!r}; return a number or None") from None
        return number if math.isfinite(number) else None


def own_metrics(tables: Sequence[MetricTable], base: Path, digests: Digests) -> tuple[OwnMetric, ...]:
    """The plan's own metrics, each loaded to see that it is there. Raises FileError or InputError naming the file."""
    metrics = []
    for table in tables:
        file = (base / table.file).resolve()
        digest, _ = digests.of(file)
        metric = OwnMetric(table.name, str(file), table.function or table.name, digest, table.higher_is_better)
        _load(metric.file, metric.function, digest)
        metrics.append(metric)
    return tuple(metrics)


@lru_cache(maxsize=64)
def _load(file: str, function: str, digest: str) -> Callable[..., Any]:
    """The function; `digest` tells one state of the file from another."""
    spec = importlib.util.spec_from_file_location(f"own_metric_{digest}", file)
    if spec is None or spec.loader is None:
        raise InputError(f"{file}: is no Python file; its name must end in .py")
    module = importlib.util.module_from_spec(spec)
    try:
        spec.loader.exec_module(module)
    except Exception as error:  # noqa: BLE001  whatever the user's file raises is the user's to read
        raise InputError(f"{file}: cannot be loaded: {type(error).__name__}: {error}") from None
    found = getattr(module, function, None)
    if not callable(found):
        raise InputError(f"{file}: holds no function {function!r}; correct `function` or `name` in [[metric]]")
    call: Callable[..., Any] = found
    return call
