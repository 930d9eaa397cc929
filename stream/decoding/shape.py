"""Dotted paths and their uses come in; a struct type that decodes just these goes out, and its columns."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from operator import attrgetter
from typing import Annotated, Any

import msgspec

from stream.decoding.uses import FRACTION, LIST, TEXT, WHOLE, YES_NO, Use
from stream.errors import BadSettings

__all__ = ["Shape"]

Tree = dict[str, "Use | Tree"]


class Shape:
    """The part of a message that is used: `decoder` makes a struct of it, `columns` take structs apart.

    Values are None where the message has none, or null, or lacks an object on the way.
    """

    def __init__(self, uses: Mapping[str, Use]) -> None:
        tree: Tree = {}
        for path, use in uses.items():
            _plant(tree, path, use)
        self.decoder = msgspec.json.Decoder(_struct(tree))
        self._getters = {path: _getters(tree, path) for path in uses}

    def column(self, structs: Sequence[Any], path: str) -> list[Any]:
        """The values at one path, as many as `structs`."""
        first, *further = self._getters[path]
        values = list(map(first, structs))
        for getter in further:
            values = [None if parent is None else getter(parent) for parent in values]
        return values

    def columns(self, structs: Sequence[Any]) -> dict[str, list[Any]]:
        """The values at every path."""
        return {path: self.column(structs, path) for path in self._getters}


def _plant(tree: Tree, path: str, use: Use) -> None:
    """Adds a path to the tree; raises BadSettings where it runs through or ends at another."""
    *parents, leaf = path.split(".")
    for parent in parents:
        branch = tree.setdefault(parent, {})
        if isinstance(branch, Use):
            raise BadSettings(f"path {path!r} goes through {parent!r}, which another path reads as a value")
        tree = branch
    if leaf in tree:
        raise BadSettings(f"path {path!r} is read as a value, but another path goes through it")
    tree[leaf] = use


def _struct(tree: Tree) -> type[Any]:
    """A struct type with one optional attribute f0, f1, ... for each key, whatever characters it holds."""
    attributes = [f"f{at}" for at in range(len(tree))]
    types = [_struct(part) if isinstance(part, dict) else _type(part) for part in tree.values()]
    return msgspec.defstruct(
        "Message",
        [(attribute, kind | None, None) for attribute, kind in zip(attributes, types, strict=True)],
        rename=dict(zip(attributes, tree, strict=True)),
        gc=False,
    )


def _type(use: Use) -> Any:
    """The msgspec type of the JSON values that fit a use."""
    if LIST in use.kinds:
        return list[str | int]
    kinds: list[Any] = []
    if TEXT in use.kinds:
        kinds.append(str)
    if YES_NO in use.kinds:
        kinds.append(bool)
    if FRACTION in use.kinds:
        kinds.append(Annotated[float, msgspec.Meta(ge=use.low, le=use.high)])
    elif WHOLE in use.kinds:
        kinds.append(_whole(use))
    union = kinds[0]
    for kind in kinds[1:]:
        union = union | kind
    return union


def _whole(use: Use) -> Any:
    if math.isinf(use.low):
        return int
    return Annotated[int, msgspec.Meta(ge=int(use.low), le=int(use.high))]


def _getters(tree: Tree, path: str) -> list[attrgetter[Any]]:
    """One getter for each step of a path."""
    getters = []
    part: Use | Tree = tree
    for key in path.split("."):
        assert isinstance(part, dict)
        getters.append(attrgetter(f"f{list(part).index(key)}"))
        part = part[key]
    return getters
