"""The folder through which workers hand records to the front.

A worker writes a record as a file, the front maps it into memory and removes its name at once: the pages
live as long as somebody uses the record, and a front that is killed leaves at most the files of solves that
were being handed over. Those are swept by the next front that starts on the same folder: each front holds a
lock on its own subfolder, and a subfolder whose lock can be had belongs to nobody any more (process numbers
are no proof of life in a container, where they repeat).
"""

from __future__ import annotations

import fcntl
import logging
import mmap
import os
import shutil
import tempfile
from pathlib import Path
from typing import IO, Final

__all__ = ["Spool", "default_root"]

_log = logging.getLogger(__name__)
_LOCK: Final = "lock"
_PREFIX: Final = "front-"


def default_root() -> Path:
    """A folder of this user under the system's temporary folder."""
    return Path(tempfile.gettempdir()) / f"modewright-spool-{os.getuid()}"


class Spool:
    """The front's own subfolder of `root`; what dead fronts left there is removed first.

    Raises PermissionError when `root` belongs to somebody else, OSError when it cannot be made.
    """

    def __init__(self, root: Path) -> None:
        root.mkdir(mode=0o700, parents=True, exist_ok=True)
        # In a world-writable temporary folder somebody else could have made it first, to read our records.
        if root.stat().st_uid != os.getuid():
            raise PermissionError(f"the spool folder {root} belongs to another user")
        with (root / _LOCK).open("w") as gate:
            # One at a time: a sweep must not meet a subfolder that is made but not locked yet.
            fcntl.flock(gate, fcntl.LOCK_EX)
            self.swept = _sweep(root)
            self.folder = Path(tempfile.mkdtemp(prefix=_PREFIX, dir=root))
            self._lock = _locked(self.folder)
        if self.swept:
            _log.info("swept the spool", extra={"folders": self.swept})

    def path(self, name: str) -> Path:
        """Where a record of this name is handed over."""
        return self.folder / name

    def take(self, path: Path) -> mmap.mmap:
        """The bytes of a record that a worker has written, memory-mapped; the file has no name afterwards.

        Raises OSError when there is none, ValueError when it is empty.
        """
        try:
            with path.open("rb") as file:
                return mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_READ)
        finally:
            path.unlink(missing_ok=True)

    def close(self) -> None:
        """Remove the subfolder."""
        shutil.rmtree(self.folder, ignore_errors=True)
        self._lock.close()


def _locked(folder: Path) -> IO[str]:
    file = (folder / _LOCK).open("w")
    try:
        fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        file.close()
        raise
    return file


def _sweep(root: Path) -> int:
    swept = 0
    for folder in root.glob(f"{_PREFIX}*"):
        try:
            with _locked(folder):
                shutil.rmtree(folder, ignore_errors=True)
                swept += 1
        except OSError:  # its front is alive, or it is not a folder of ours
            continue
    return swept
