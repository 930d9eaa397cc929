"""Every error that Bedload raises on purpose, as one tree, each with its sysexits code.

    BedloadError                 70  a bug, when nothing below fits
    ├── UsageError               64  the command line cannot be read
    ├── BadData                  65  messages, a log or a snapshot cannot be used
    ├── InputMissing             66  a file that was named is not there
    ├── Unavailable              69  a service does not answer
    ├── CannotCreate             73  an output may not be made here (a used state folder, a full disk)
    ├── FileTrouble              74  reading or writing failed
    ├── TryLater                 75  somebody else holds the state folder
    ├── NoPermission             77  the operating system refused
    └── BadSettings              78  settings are wrong, or do not match the state
        └── MessagesGone         78  messages that are to be read were removed from their topic

A message names place, value, limit and cure, in one or two sentences.
"""

from __future__ import annotations

__all__ = [
    "BadData",
    "BadSettings",
    "BedloadError",
    "CannotCreate",
    "FileTrouble",
    "InputMissing",
    "MessagesGone",
    "NoPermission",
    "TryLater",
    "Unavailable",
    "UsageError",
]


class BedloadError(Exception):
    """Root of the tree; `exit_code` is what the command line exits with."""

    exit_code = 70


class UsageError(BedloadError):
    """The command line cannot be read as asked."""

    exit_code = 64


class BadData(BedloadError):
    """Messages, a log or a stored file hold something that cannot be used."""

    exit_code = 65


class InputMissing(BedloadError):
    """A file or folder that was named is not there."""

    exit_code = 66


class Unavailable(BedloadError):
    """A service that is needed does not answer."""

    exit_code = 69


class CannotCreate(BedloadError):
    """An output may not be made: the folder is used already, or the disk is full."""

    exit_code = 73


class FileTrouble(BedloadError):
    """Reading or writing a file failed."""

    exit_code = 74


class TryLater(BedloadError):
    """Another process holds what is needed; the same call may work later."""

    exit_code = 75


class NoPermission(BedloadError):
    """The operating system refused access."""

    exit_code = 77


class BadSettings(BedloadError):
    """Settings are wrong, or do not match the state they are used with."""

    exit_code = 78


class MessagesGone(BadSettings):
    """Messages that are to be read were removed from their topic; `loss` says which, without a cure."""

    def __init__(self, loss: str) -> None:
        super().__init__(
            f"{loss}: retention is shorter than the worker was behind. Go on without them by "
            "--on-gap skip, or begin again with a fresh state folder"
        )
        self.loss = loss
