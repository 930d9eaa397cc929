"""The ledger of token names: texts of entries whose weight became non-zero in, names by address out.

The names lie end to end in one block of bytes, so that a checkpoint copies them at once and sorts them in
compiled code, while learning goes on.
"""

from __future__ import annotations

from array import array
from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.batch import Batch
from stream.kernel import kernel

__all__ = ["NameLedger", "NamePile", "names_at", "names_state"]

Arrays = dict[str, npt.NDArray[Any]]


class NameLedger:
    """Names (`field-name 0x1F token`, UTF-8) by address; the first recorded stands until it is dropped."""

    def __init__(self) -> None:
        self._places: dict[int, int] = {}
        self._addresses = array("Q")
        self._offsets = array("q", [0])
        self._bytes = bytearray()

    def __len__(self) -> int:
        return len(self._places)

    def __getitem__(self, address: int) -> bytes:
        """The name, b"" where none is known."""
        place = self._places.get(address)
        return b"" if place is None else bytes(self._bytes[self._offsets[place] : self._offsets[place + 1]])

    @property
    def name_bytes(self) -> int:
        """Bytes of the names themselves."""
        return len(self._bytes)

    def record(self, batch: Batch, entries: npt.NDArray[np.int64]) -> None:
        """Takes down the texts of the given entries of a batch."""
        texts = batch.texts.data
        starts = batch.text_starts[entries]
        ends = starts + batch.text_lengths[entries]
        for address, start, end in zip(
            batch.addresses[entries].tolist(), starts.tolist(), ends.tolist(), strict=True
        ):
            if address not in self._places:
                self._places[address] = len(self._places)
                self._addresses.append(address)
                self._bytes += texts[start:end]
                self._offsets.append(len(self._bytes))

    def addresses(self) -> npt.NDArray[np.uint64]:
        """All addresses with a name, ascending."""
        return np.sort(np.array(self._addresses, np.uint64))

    def drop(self, addresses: npt.NDArray[np.uint64]) -> None:
        """Forgets the names of the given addresses."""
        copied = self.copied()
        kept = np.flatnonzero(~np.isin(copied["addresses"], addresses))
        self.restore(_chosen(copied, kept))

    def copied(self) -> Arrays:
        """What `names_state` makes the state of, on any thread."""
        return {
            "addresses": np.array(self._addresses, np.uint64),
            "offsets": np.array(self._offsets, np.int64),
            "bytes": np.frombuffer(bytes(self._bytes), np.uint8),
        }

    def restore(self, state: Mapping[str, npt.NDArray[Any]]) -> None:
        """Replaces the ledger by what `names_state` gave."""
        self._places = {address: place for place, address in enumerate(state["addresses"].tolist())}
        self._addresses = array("Q", state["addresses"].tobytes())
        self._offsets = array("q", state["offsets"].tobytes())
        self._bytes = bytearray(state["bytes"])


class NamePile:
    """Names of addresses that are recorded once each and never dropped: nothing is looked up meanwhile."""

    def __init__(self) -> None:
        self._addresses = [np.empty(0, np.uint64)]
        self._lengths = [np.empty(0, np.int64)]
        self._texts = [np.empty(0, np.uint8)]
        self.name_bytes = 0

    def record(self, batch: Batch, entries: npt.NDArray[np.int64]) -> None:
        """Takes down the texts of the given entries of a batch, whose addresses are new."""
        if not len(entries):
            return
        lengths = batch.text_lengths[entries].astype(np.int64)
        offsets = np.concatenate([np.zeros(1, np.int64), np.cumsum(lengths)])
        texts = np.empty(offsets[-1], np.uint8)
        _copy_names(batch.texts, batch.text_starts[entries], offsets, texts)
        self._addresses.append(batch.addresses[entries])
        self._lengths.append(lengths)
        self._texts.append(texts)
        self.name_bytes += len(texts)

    def at(self, addresses: npt.NDArray[np.uint64]) -> tuple[bytes, ...]:
        """The name of each address, b"" where none is known; `addresses` in ascending order."""
        names = [b""] * len(addresses)
        for known, lengths, texts in zip(self._addresses, self._lengths, self._texts, strict=True):
            places = np.searchsorted(addresses, known)
            found = np.flatnonzero(places < len(addresses))
            found = found[addresses[places[found]] == known[found]]
            if not len(found):
                continue
            ends = np.cumsum(lengths)
            for place, start, end in zip(
                places[found].tolist(), (ends - lengths)[found].tolist(), ends[found].tolist(), strict=True
            ):
                names[place] = texts[start:end].tobytes()
        return tuple(names)


def names_at(addresses: npt.NDArray[np.uint64], names: Mapping[str, npt.NDArray[Any]]) -> tuple[bytes, ...]:
    """The name of each address, b"" where none is known; `names` as `names_state` gives them."""
    known, text = names["addresses"], names["bytes"].tobytes()
    places = np.searchsorted(known, addresses)
    there = places < len(known)
    there[there] = known[places[there]] == addresses[there]
    starts, ends = np.zeros((2, len(addresses)), np.int64)
    starts[there] = names["offsets"][places[there]]
    ends[there] = names["offsets"][places[there] + 1]
    return tuple(text[start:end] for start, end in zip(starts.tolist(), ends.tolist(), strict=True))


def names_state(copied: Arrays) -> Arrays:
    """Addresses ascending, where each name begins (one more than there are), the names end to end."""
    return _chosen(copied, np.argsort(copied["addresses"]))


def _chosen(names: Arrays, order: npt.NDArray[np.int64]) -> Arrays:
    """The names at the given places, in that order."""
    starts = names["offsets"][order]
    offsets = np.zeros(len(order) + 1, np.int64)
    np.cumsum(names["offsets"][order + 1] - starts, out=offsets[1:])
    chosen = np.empty(offsets[-1], np.uint8)
    _copy_names(names["bytes"], starts, offsets, chosen)
    return {"addresses": names["addresses"][order], "offsets": offsets, "bytes": chosen}


@kernel
def _copy_names(
    names: npt.NDArray[np.uint8],
    starts: npt.NDArray[np.int64],
    offsets: npt.NDArray[np.int64],
    chosen: npt.NDArray[np.uint8],
) -> None:
    """chosen[offsets[i] : offsets[i + 1]] = as many of `names` from starts[i] on."""
    for i in range(len(starts)):
        for at in range(offsets[i], offsets[i + 1]):
            chosen[at] = names[starts[i] + at - offsets[i]]
