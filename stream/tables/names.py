"""The ledger of token names: texts of entries whose weight became non-zero in, names by address out."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from stream.batch import Batch

__all__ = ["NameLedger"]


class NameLedger:
    """Names (`field-name 0x1F token`, UTF-8) by address; the first recorded stands until it is dropped."""

    def __init__(self) -> None:
        self._names: dict[int, bytes] = {}

    def __len__(self) -> int:
        return len(self._names)

    def __getitem__(self, address: int) -> bytes:
        """The name, b"" where none is known."""
        return self._names.get(address, b"")

    @property
    def name_bytes(self) -> int:
        """Bytes of the names themselves."""
        return sum(map(len, self._names.values()))

    def record(self, batch: Batch, entries: npt.NDArray[np.int64]) -> None:
        """Takes down the texts of the given entries of a batch."""
        for entry in entries.tolist():
            self._names.setdefault(int(batch.addresses[entry]), batch.text(entry))

    def copy(self) -> NameLedger:
        """The ledger as it is now, for another thread; the names themselves are shared."""
        other = NameLedger()
        other._names = self._names.copy()
        return other

    def addresses(self) -> npt.NDArray[np.uint64]:
        """All addresses with a name, ascending."""
        found = np.fromiter(self._names, np.uint64, len(self._names))
        found.sort()
        return found

    def drop(self, addresses: Iterable[int]) -> None:
        """Forgets the names of the given addresses."""
        for address in addresses:
            del self._names[address]

    def state(self) -> dict[str, npt.NDArray[Any]]:
        """Addresses ascending, where each name begins (one more than there are), the names end to end."""
        addresses = self.addresses()
        names = [self._names[address] for address in addresses.tolist()]
        offsets = np.zeros(len(names) + 1, np.int64)
        np.cumsum([len(name) for name in names], out=offsets[1:])
        return {"addresses": addresses, "offsets": offsets, "bytes": np.frombuffer(b"".join(names), np.uint8)}

    def restore(self, state: Mapping[str, npt.NDArray[Any]]) -> None:
        """Replaces the ledger by what `state` gave."""
        blob = state["bytes"].tobytes()
        offsets = state["offsets"].tolist()
        self._names = {
            address: blob[offsets[i] : offsets[i + 1]]
            for i, address in enumerate(state["addresses"].tolist())
        }
