"""Values of one category field in, slice codes out: the first values seen get a slice of their own."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["MAX_SLICES", "OTHER", "Slices"]

MAX_SLICES = 64
MAX_NAME_CHARACTERS = 100
OTHER = "(other)"
MISSING = "(none)"


class Slices:
    """Names of slices in the order in which they were first seen; code 0 is everything beyond the first 64.

    Values count as the text that they show; texts that agree in the first 100 characters are one slice,
    so that memory stays bounded whatever the feed holds.
    """

    def __init__(self, names: Sequence[str] = ()) -> None:
        self._codes = {name: code for code, name in enumerate(names, start=1)}

    @property
    def names(self) -> list[str]:
        """Names of codes 1, 2, ...; at most 64."""
        return list(self._codes)

    def codes(self, values: Sequence[Any]) -> npt.NDArray[np.int64]:
        """int64[m] for m texts, whole numbers, yes/no or None (no value)."""
        return np.fromiter(map(self._code, values), np.int64, len(values))

    def _code(self, value: Any) -> int:
        name = _name(value)
        code = self._codes.get(name)
        if code is None:
            if len(self._codes) == MAX_SLICES:
                return 0
            code = self._codes[name] = len(self._codes) + 1
        return code


def _name(value: Any) -> str:
    if isinstance(value, str):
        return value[:MAX_NAME_CHARACTERS]
    if value is None:
        return MISSING
    if isinstance(value, bool):
        return "true" if value else "false"
    return str(value)[:MAX_NAME_CHARACTERS]
