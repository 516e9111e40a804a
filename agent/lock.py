"""Two agents on one data folder would write over each other: the second is refused."""

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

LOCK_FILE = "agent.lock"


class FolderInUseError(Exception):
    def __init__(self, folder: Path) -> None:
        super().__init__(f"{folder} is in use by another agent")
        self.folder = folder


@contextmanager
def only_agent(folder: Path) -> Iterator[None]:
    """Make the folder if need be and hold it; the operating system lets go of it however this process ends.

    Raises
    ------
    FolderInUseError
        Another agent holds it.
    """
    folder.mkdir(parents=True, exist_ok=True)
    handle = os.open(folder / LOCK_FILE, os.O_RDWR | os.O_CREAT, 0o644)
    try:
        if not _take(handle):
            raise FolderInUseError(folder)
        yield
    finally:
        os.close(handle)


def _take(handle: int) -> bool:
    try:
        if os.name == "nt":
            import msvcrt  # noqa: PLC0415 - exists on Windows only

            msvcrt.locking(handle, msvcrt.LK_NBLCK, 1)  # type: ignore[attr-defined]
        else:
            import fcntl  # noqa: PLC0415 - exists on Unix only

            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        return False
    return True
