"""Scored batches in, metrics of the whole run, the current window and each slice out, in fixed memory."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.errors import BadSettings, BedloadError
from stream.metrics.auc_kernel import append_all, compress, joined, sorted_points
from stream.metrics.slices import MAX_SLICES, OTHER, Slices
from stream.metrics.summary import Summary, WindowRow, summarise
from stream.metrics.tally_kernel import BINS, CLOSED, FIRST_SLICE, MESSAGES, REJECTED, WINDOW, tally

__all__ = ["Progress"]

Floats = npt.NDArray[np.float64]

POINTS, ITEMS = 1 << 17, 3 << 15  # 2 MB and 3 MB of memory at most
SLICE_POINTS, SLICE_ITEMS = 1 << 12, 3 << 10


class _Rankings:
    """The AUC summaries of n scopes, as `auc_kernel` wants them. Memory is touched only where used."""

    def __init__(self, scopes: int, points: int, items: int) -> None:
        self.points = np.zeros((scopes, points, 2))
        self.fill = np.zeros(scopes, np.int64)
        self.items = np.zeros((scopes, items, 4))
        self.used = np.zeros(scopes, np.int64)

    def in_use(self, scope: int) -> tuple[Floats, Floats]:
        """Points and items of one scope that hold something (views)."""
        return self.points[scope, : self.fill[scope]], self.items[scope, : self.used[scope]]

    def entries(self, *scopes: int) -> Floats:
        """All scores of one or more scopes, as `joined` gives them."""
        parts = [self.in_use(scope) for scope in scopes]
        points, items = (np.concatenate(arrays) for arrays in zip(*parts, strict=True))
        return joined(sorted_points(points), items) if len(points) + len(items) else np.empty((0, 4))

    def move(self, source: int, target: int, entries: Floats) -> None:
        """Everything of scope `source`, whose `entries` are given, into `target`; `source` is empty then.

        Few points go the way of fresh ones; many are sorted already and join the items at once.
        """
        points, items = self.in_use(source)
        if len(items) > 0 or len(points) > self.points.shape[1] // 4:
            self.used[target] = compress(entries, self.in_use(target)[1], self.items[target])
        else:
            append_all(self.points, self.fill, self.items, self.used, target, points)
        self.fill[source] = self.used[source] = 0

    def state(self, prefix: str, scopes: int) -> dict[str, npt.NDArray[Any]]:
        """The first `scopes` scopes, only what is in use, one after the other."""
        parts = [self.in_use(scope) for scope in range(scopes)]
        return {
            f"{prefix}_fill": self.fill[:scopes].copy(),
            f"{prefix}_points": np.concatenate([np.empty((0, 2)), *(points for points, _ in parts)]),
            f"{prefix}_used": self.used[:scopes].copy(),
            f"{prefix}_items": np.concatenate([np.empty((0, 4)), *(items for _, items in parts)]),
        }

    def restore(self, prefix: str, state: Mapping[str, npt.NDArray[Any]]) -> None:
        """What `state` gave, into summaries that are empty."""
        for counts, rows, name, total in (
            (self.fill, self.points, "fill", "points"),
            (self.used, self.items, "used", "items"),
        ):
            saved, source = state[f"{prefix}_{name}"], state[f"{prefix}_{total}"]
            counts[: len(saved)] = saved
            start = 0
            for scope, count in enumerate(saved.tolist()):
                rows[scope, :count] = source[start : start + count]
                start += count


class Progress:
    """Progressive metrics: feed it every prediction made before its update, in order.

    `window`: messages in a window (rejected ones count). `sliced`: whether `observe` will be given
    slice codes, which `self.slices` makes from the values of a category field.
    """

    def __init__(self, window: int, sliced: bool = False) -> None:
        self.window = window
        self.slices = Slices()
        self._sliced = sliced
        scopes = FIRST_SLICE + (MAX_SLICES + 1 if sliced else 0)
        self._counts = np.zeros((scopes, 4), np.int64)
        self._loss = np.zeros(scopes)
        self._bins = np.zeros((scopes, BINS, 3))
        self._rankings = _Rankings(2, POINTS, ITEMS)
        self._slice_rankings = _Rankings(scopes - FIRST_SLICE, SLICE_POINTS, SLICE_ITEMS)

    @property
    def messages(self) -> int:
        """Messages so far, rejected ones too."""
        return int(self._counts[[CLOSED, WINDOW], MESSAGES].sum())

    @property
    def window_left(self) -> int:
        """Messages that still fit in the current window; at 0 it must be closed."""
        return self.window - int(self._counts[WINDOW, MESSAGES])

    def observe(
        self,
        margins: Floats,
        labels: npt.NDArray[np.int8],
        weights: Floats,
        slice_codes: npt.NDArray[np.int64] | None = None,
        *,
        rejected: int = 0,
    ) -> None:
        """Adds m scored messages and `rejected` ones that have no score.

        `margins`: float64[m], finite, in log-odds; `labels`: int8[m], 1, 0, or -1 without a label;
        `weights`: float64[m], finite, >= 0; `slice_codes`: int64[m] from `self.slices.codes`, needed
        exactly when sliced. Raises BedloadError when the batch reaches past the window's end.
        """
        m = len(margins)
        if m + rejected > self.window_left:
            raise BedloadError(
                f"metrics: a batch of {m + rejected} messages reaches past the end of the window "
                f"({self.window_left} of {self.window} left): cut batches at window ends"
            )
        if self._sliced != (slice_codes is not None) and m > 0:
            raise BedloadError("metrics: slice codes are needed exactly when slices were asked for")
        self._counts[WINDOW, [MESSAGES, REJECTED]] += rejected
        if m > 0:
            whole, sliced = self._rankings, self._slice_rankings
            tally(
                margins, labels, weights, np.zeros(0, np.int64) if slice_codes is None else slice_codes,
                self._counts, self._loss, self._bins,
                whole.points, whole.fill, whole.items, whole.used,
                sliced.points, sliced.fill, sliced.items, sliced.used,
            )  # fmt: skip

    def summary(self) -> Summary:
        """Metrics of the whole run so far: closed windows and the current one."""
        return summarise(
            self._counts[CLOSED] + self._counts[WINDOW],
            float(self._loss[CLOSED] + self._loss[WINDOW]),
            self._bins[CLOSED] + self._bins[WINDOW],
            self._rankings.entries(CLOSED, WINDOW),
        )

    def window_summary(self) -> Summary:
        """Metrics of the current window so far."""
        return self._summary(WINDOW, self._rankings.entries(WINDOW))

    def slice_summaries(self) -> list[tuple[str, Summary]]:
        """Name and metrics of each slice over the whole run, first seen first; "(other)" last, if any."""
        rows = [(name, self._slice(code)) for code, name in enumerate(self.slices.names, start=1)]
        if self._sliced and self._counts[FIRST_SLICE, MESSAGES] > 0:
            rows.append((OTHER, self._slice(0)))
        return rows

    def close_window(self, nnz: Callable[[], int], live: int) -> WindowRow:
        """The row of the current window, full or not, and a fresh window; `nnz` is asked for its number."""
        entries = self._rankings.entries(WINDOW)
        row = WindowRow(self.messages, self._summary(WINDOW, entries), nnz(), live)
        for sums in (self._counts, self._loss, self._bins):
            sums[CLOSED] += sums[WINDOW]
            sums[WINDOW] = 0
        self._rankings.move(WINDOW, CLOSED, entries)
        return row

    def state(self) -> dict[str, npt.NDArray[Any]]:
        """Everything, by name: equal streams give equal bytes, however they were cut into batches.

        `settings`: int64[2], window and whether sliced; `counts`, `loss`, `bins`, `auc_*`, `slice_auc_*`:
        the kernels' arrays, cut to the scopes and rows in use; `slice_names`: uint8[...], UTF-8 end to
        end, with `slice_name_bytes`: int64[k], their lengths.
        """
        names = [name.encode("utf-8", "surrogatepass") for name in self.slices.names]
        slices = len(names) + 1 if self._sliced else 0
        scopes = FIRST_SLICE + slices
        return {
            "settings": np.array([self.window, self._sliced], np.int64),
            "counts": self._counts[:scopes].copy(),
            "loss": self._loss[:scopes].copy(),
            "bins": self._bins[:scopes].copy(),
            **self._rankings.state("auc", 2),
            **self._slice_rankings.state("slice_auc", slices),
            "slice_names": np.frombuffer(b"".join(names), np.uint8).copy(),
            "slice_name_bytes": np.array([len(name) for name in names], np.int64),
        }

    def restore(self, state: Mapping[str, npt.NDArray[Any]]) -> None:
        """Goes on from what `state` gave; meant for a fresh object.

        Raises BadSettings when window or slicing differ from those of the state.
        """
        window, sliced = (int(value) for value in state["settings"])
        if (window, bool(sliced)) != (self.window, self._sliced):
            raise BadSettings(
                f"metrics.window is {self.window} and metrics.slice_by is {_said(self._sliced)}, but the "
                f"checkpoint was made with window {window} and slice_by {_said(bool(sliced))}: "
                "set them back, or start again with --fresh"
            )
        text, names, start = state["slice_names"].tobytes(), [], 0
        for length in state["slice_name_bytes"].tolist():
            names.append(text[start : start + length].decode("utf-8", "surrogatepass"))
            start += length
        self.slices = Slices(names)
        scopes = len(state["counts"])
        self._counts[:scopes] = state["counts"]
        self._loss[:scopes] = state["loss"]
        self._bins[:scopes] = state["bins"]
        self._rankings.restore("auc", state)
        self._slice_rankings.restore("slice_auc", state)

    def _slice(self, code: int) -> Summary:
        return self._summary(FIRST_SLICE + code, self._slice_rankings.entries(code))

    def _summary(self, scope: int, entries: Floats) -> Summary:
        return summarise(self._counts[scope], float(self._loss[scope]), self._bins[scope], entries)


def _said(is_set: bool) -> str:
    return "set" if is_set else "not set"
