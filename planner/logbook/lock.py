"""The file beside a logbook that one writing process holds locked; the system frees it when that process ends."""

import os
import sys
from pathlib import Path
from typing import BinaryIO

from planner.errors import LogbookUnavailable

NOTE_AT = 1  # the first byte is what is locked: on Windows a locked byte cannot be read by others


class WriteLock:
    """An exclusive lock on `path`, taken without waiting."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self._file: BinaryIO | None = None

    @property
    def held(self) -> bool:
        return self._file is not None

    def take(self) -> None:
        """Take it, or raise LogbookUnavailable naming the process that has it."""
        if self._file is not None:
            return
        try:
            file = os.fdopen(os.open(self.path, os.O_RDWR | os.O_CREAT, 0o666), "r+b", buffering=0)
        except OSError as error:
            raise LogbookUnavailable(f"{self.path}: cannot be opened for writing ({error.strerror})") from error
        try:
            _lock(file)
        except OSError as error:
            file.seek(NOTE_AT)
            holder = file.read(64).decode("ascii", "replace").strip() or "unknown"
            file.close()
            raise LogbookUnavailable(
                f"another Nightfringe (process {holder}) is writing to this logbook; let it finish or end it "
                f"(lock file: {self.path})"
            ) from error
        file.seek(NOTE_AT)
        file.truncate()
        file.write(str(os.getpid()).encode())
        self._file = file

    def release(self) -> None:
        """Give it back."""
        if self._file is not None:
            self._file.close()
            self._file = None


if sys.platform == "win32":
    import msvcrt

    def _lock(file: BinaryIO) -> None:
        file.seek(0)
        msvcrt.locking(file.fileno(), msvcrt.LK_NBLCK, 1)

else:
    import fcntl

    def _lock(file: BinaryIO) -> None:
        fcntl.flock(file.fileno(), fcntl.LOCK_EX | fcntl.LOCK_NB)
