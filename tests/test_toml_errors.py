"""msgspec's messages in the user's words."""

from __future__ import annotations

from typing import Annotated, Literal

import msgspec
import pytest
from msgspec import Meta

from unmix.toml_errors import explain_error


class Inner(msgspec.Struct, forbid_unknown_fields=True):
    size_m: Annotated[float, Meta(ge=0.0, le=10.0)]
    kind: Annotated[Literal["nearest", "own"], Meta(description="x")] | None = None


class Outer(msgspec.Struct, forbid_unknown_fields=True):
    inner: Inner | None = None
    several: list[Inner] = []
    flag: bool | str = False


@pytest.mark.parametrize(
    ("tree", "line"),
    [
        ({"inner": {"size_m": 1.0, "kind": "far"}}, "key `inner.kind`: 'far' is none of 'nearest', 'own'"),
        ({"inner": {"size_m": 11.0}}, "key `inner.size_m`: expected a number <= 10.0"),
        ({"inner": {"size_m": "1"}}, "key `inner.size_m`: expected a number, got text"),
        ({"inner": {}}, "key `inner.size_m` is missing"),
        ({"inner": 3}, "key `inner`: expected a table, got a whole number"),
        ({"several": {}}, "key `several`: expected a list, got a table"),
        ({"several": [{"size_m": 1.0}, {"size_mm": 2}]}, "unknown key `size_mm` in several[1]; did you mean `size_m`?"),
        ({"flag": 1}, "key `flag`: expected true or false or text, got a whole number"),
        ({"qqq": 1}, "unknown key `qqq` in the top level; known keys: inner, several, flag"),
    ],
)
def test_errors_in_plain_words(tree: dict[str, object], line: str) -> None:
    with pytest.raises(msgspec.ValidationError) as caught:
        msgspec.convert(tree, Outer, strict=True)
    assert explain_error(str(caught.value), Outer) == line
