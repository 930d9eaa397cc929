"""Patterns of log files that grow come in; blocks of raw messages go out as they are written.

Files are read in the order of their names, each to its end, and each is one partition: 0, 1, 2, ... as they
were read. One that others follow is left once it has been quiet for QUIET_S; its last line counts then,
though it has no end. A file that was renamed is known again by its beginning and goes on; a new one under its
name comes next.

A position is that of a log (stream/sources/log.py), but `of_bytes` never goes past what was read, and `size`
is the offset at which a file was left: it depends on the messages read and on nothing else.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

from stream.errors import BadSettings
from stream.message import Block, Position
from stream.sources.files import STANDARD_INPUT, LogFile, matching_files
from stream.sources.growing import CURE, GrowingFile
from stream.sources.lines import empty_block
from stream.sources.recognising import Recognition, has_more, is_blank

__all__ = ["FollowSource"]

LOOK_S = 0.5


class FollowSource:
    """The messages of a log that grows. Implements stream.message.LiveSource.

    `known`: a position of this log, by which files that were renamed since it was left are found when they
    are read again from the beginning. `clock`, `now`: seconds, monotonic and since the epoch; they decide
    when a file is left, and nothing that is read.

    Raises BadSettings where lines may be lost or come twice: a file was emptied, written over, has grown
    after it was left, is new and sorts before the one at hand, or was moved aside more than once unread.
    InputMissing where no file matches at first, BadData (a damaged compressed file), NoPermission,
    FileTrouble.
    """

    def __init__(
        self,
        paths: Sequence[str],
        folder: Path,
        max_line_bytes: int,
        known: Position | None = None,
        clock: Callable[[], float] = time.monotonic,
        now: Callable[[], float] = time.time,
    ) -> None:
        files = matching_files(paths, folder)
        if files[0].name == STANDARD_INPUT:
            raise BadSettings(
                "standard input cannot be followed: after a crash it cannot be read again. Let it be written "
                "to a file and name that in feed.paths, or use `bedload replay`"
            )
        self._folder = folder
        self._max_line_bytes = max_line_bytes
        self._known: list[Mapping[str, Any]] = list(known["files"]) if known else []
        self._clock, self._now = clock, now
        self._files = Recognition(paths, folder)
        self._end = files[-1].path.stat()  # of the last file, when it was opened
        self._left: list[dict[str, Any]] = []  # marks of files read and left
        self._file: GrowingFile | None = None
        self._watched: GrowingFile | None = None  # the one left last: nothing may be added to it
        self._look_at = 0.0
        self._dry = False  # nothing to read when last looked

    def start(self) -> None:
        """Goes to the beginning of the first file."""
        self._go_on()

    def read(self, limit: int) -> Block:
        """Up to `limit` messages of one file; an empty block where nothing was written."""
        while True:
            if self._file is not None:
                block = self._file.read(limit)
                if len(block):
                    self._dry = False
                    return block
            if not self._go_on():
                return empty_block("" if self._file is None else self._file.name)

    def read_range(self, partition: int, first: int, last: int, limit: int) -> Block:
        """Up to `limit` messages of file number `partition` with first <= offset < last."""
        while True:
            file = self._at(partition, first)
            block = file.read(limit, last)
            if not len(block) and file.reader.live:
                file.reader.finish()  # that its last line has no end was no matter when it was read first
                block = file.read(limit, last)
            if len(block):
                return block
            if file.given:
                raise BadSettings(f"{file.path} has no message at byte {first:,}, where one was read. {CURE}")
            self._leave_for(self._following(partition))  # a file without messages has no number

    def place(self, partition: int, offset: int) -> None:
        """Goes to an offset of file number `partition`: the one at hand or the next."""
        self._at(partition, offset)

    def next_offsets(self) -> Mapping[int, int]:
        """The next offset of the file at hand."""
        return {} if self._file is None else {len(self._left): self._file.offset}

    def position(self) -> Position:
        """Next message to read; a file of which no message was read yet is not in it."""
        if self._file is not None and self._file.given:
            return {"files": [*self._left, self._file.mark(None)], "offset": self._file.offset}
        if not self._left:
            return {"files": [], "offset": 0}
        return {
            "files": [*self._left[:-1], {**self._left[-1], "size": None}],
            "offset": self._left[-1]["size"],
        }

    def seek(self, position: Position) -> None:
        """Goes to a position. Raises BadSettings where the file that it is in cannot be found."""
        marks = [dict(mark) for mark in position["files"]]
        self.close()
        self._left = marks[:-1]
        if not marks:
            return self.start()
        path = self._files.find(marks[-1])
        if path is None:
            raise BadSettings(
                f"{marks[-1]['name']} was being read, and no file that matches feed.paths or was moved aside "
                f"from there begins like it now. {CURE}"
            )
        self._open(marks[-1]["name"], path).skip_to(position["offset"], given=True)
        self._look()

    def gaps(self) -> list[tuple[int, int, int]]:
        """None: where something is gone `seek` refuses."""
        return []

    def at_end(self) -> bool:
        """Whether all that was there when the log was opened has been read."""
        own = None if self._file is None else self._file.status()
        return self._dry or (
            self._file is not None
            and own is not None
            and (own.st_dev, own.st_ino) == (self._end.st_dev, self._end.st_ino)
            and self._file.offset >= self._end.st_size
        )

    def fraction_read(self) -> float | None:
        """None: a log that grows has no end."""
        return None

    def commit(self, position: Position) -> None:
        """Nobody watches."""

    def close(self) -> None:
        """Releases the files that are open."""
        for file in (self._file, self._watched):
            if file is not None:
                file.close()
        self._file = self._watched = None

    def _at(self, partition: int, offset: int) -> GrowingFile:
        """The file of that number, at that offset."""
        while self._file is None or len(self._left) < partition:
            self._leave_for(self._following(partition))
        if len(self._left) > partition:
            raise BadSettings(f"file number {partition} of the log was left before, and is asked for. {CURE}")
        if self._file.offset != offset:
            self._file.skip_to(offset, self._file.given)
        return self._file

    def _following(self, partition: int) -> LogFile:
        """The file that came next when the log was read first, on the way to number `partition`."""
        number = len(self._left) + (self._file is not None and self._file.given)
        if number < len(self._known):
            path = self._files.find(self._known[number])
            found = None if path is None else LogFile(self._known[number]["name"], path)
        else:
            found = self._successor()
        if found is None:
            name = f"{self._known[number]['name']}, " if number < len(self._known) else ""
            raise BadSettings(
                f"{name}file number {partition} of the log was read, and nothing that matches "
                f"{', '.join(self._files.patterns)} (feed.paths) or was moved aside from there holds it now. "
                f"{CURE}"
            )
        return found

    def _go_on(self) -> bool:
        """At the end of what is there: whether there is more to read now, here or in the next file."""
        clock, file = self._clock(), self._file
        if clock < self._look_at:
            return False
        self._look_at = clock + LOOK_S
        self._look()
        following = self._successor()
        self._dry = following is None
        if following is None or (file is not None and not file.is_quiet(clock, self._now())):
            return False
        self._look_at = clock
        if file is not None and file.reader.live:
            file.reader.finish()
        else:
            self._leave_for(following)
        return True

    def _successor(self) -> LogFile | None:
        """The file to read after the one at hand; None while there is none, or none with anything in it."""
        file = self._file
        if file is None:
            return next(iter(self._files.matching()), None)
        home = self._folder / file.name
        if file.is_renamed(home):
            return self._after_renaming(file, home)
        for found in self._files.matching():
            if found.name > file.name and self._mark_of(found) is None:
                return found
        return None

    def _after_renaming(self, file: GrowingFile, home: Path) -> LogFile | None:
        """The new file under the name of the one at hand, unless others were there in between."""
        missed = self._files.missed(home, file.written_ns(), [*self._left, file.mark(None)])
        if missed:
            raise BadSettings(
                f"{file.name} was moved aside more than once before it was read to its end, and "
                f"{', '.join(missed)} would be passed over. Let feed.paths match such files, named so that "
                f"they sort in the order of time. {CURE}"
            )
        return LogFile(file.name, home) if home.stat().st_size else None

    def _mark_of(self, found: LogFile) -> Mapping[str, Any] | None:
        """The mark of a file that was read or is being read, whatever its name; None for a new one."""
        marks = list(self._left)
        if self._file is not None:
            marks.append(self._file.mark(None))
        return self._files.known(found.path, marks)

    def _look(self) -> None:
        """Raises where something was written that would be passed over."""
        if self._watched is not None and self._watched.grew():
            raise _grown(self._watched.path, self._watched.offset)
        for found in self._files.matching():
            mark = self._mark_of(found)
            if mark is not None:
                if mark["size"] is not None and has_more(found.path, mark["size"]):
                    raise _grown(found.path, mark["size"])
            elif self._file is not None and found.name < self._file.name and not is_blank(found.path):
                raise BadSettings(
                    f"{found.name} is new and sorts before {self._file.name}, which is being read, so it "
                    f"would be passed over. Give it a name that sorts after every file read so far. {CURE}"
                )

    def _leave_for(self, following: LogFile) -> None:
        """Closes the file at hand, as far as it was read, and opens the next."""
        if self._watched is not None:
            self._watched.close()
        self._watched, self._file = self._file, None
        if self._watched is not None and self._watched.given:
            self._left.append(self._watched.mark(self._watched.offset))
        self._open(following.name, following.path)

    def _open(self, name: str, path: Path) -> GrowingFile:
        self._file = GrowingFile(name, path, len(self._left), self._max_line_bytes)
        return self._file


def _grown(path: Path, left_at: int) -> BadSettings:
    return BadSettings(
        f"{path} was left at byte {left_at:,}, as others came after it, and was written on since: that "
        f"would be passed over. Move what was added to a file that sorts last. {CURE}"
    )
