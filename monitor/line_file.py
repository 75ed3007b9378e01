"""A file that grows by whole lines: never torn by a failed write, never lost by a rotation, mended after a kill."""

import errno
import os
import re
import stat
import sys
from collections.abc import Callable
from contextlib import suppress
from datetime import UTC, datetime
from pathlib import Path
from typing import Final

if sys.platform != "win32":
    import fcntl

_TAIL: Final = 1 << 20
_FLAGS: Final = (
    os.O_WRONLY | os.O_APPEND | os.O_CREAT | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_BINARY", 0)
)  # not blocking: a pipe nobody reads is an error, not a wait
_CANNOT_SYNC: Final = (errno.EINVAL, errno.ENOTSUP, errno.EROFS)  # pipes and devices


class LineFile:
    """One file and the parts set aside from it. Owned by one thread.

    A file that was there is appended to. A file that was moved or deleted meanwhile is made anew. Where the system has locks, a second
    writer of the same file gets BlockingIOError.

    Parameters
    ----------
    path
        Of the file; its folder is never made.
    header
        What every new file begins with, line end included.
    mend
        What to put in place of a last line without its end (the program was killed); gets that fragment.
    """

    def __init__(self, path: Path, *, header: bytes = b"", mend: Callable[[bytes], bytes]) -> None:
        self.path = path.absolute()
        self.newest = b""
        self._header = header
        self._mend = mend
        self._fd: int | None = None
        self._regular = True

    @property
    def size(self) -> int:
        """Bytes of lines in the open file, its header not counted; 0 if closed."""
        if self._fd is None or not self._regular:
            return 0
        return max(os.fstat(self._fd).st_size - len(self._header), 0)

    def ready(self) -> bool:
        """Make sure that the file is open, and is still the one of that name; True if it was opened. Raises OSError."""
        if self._fd is not None:
            if not self._regular or self._still_there(self._fd):
                return False
            self.close()
        self._open()
        return True

    def append(self, line: bytes, *, durable: bool = False) -> None:
        """Append a line, its end included; ``durable``: return when it is on the disk. Raises OSError, and then nothing of it stays."""
        self.ready()
        fd = self._fd
        assert fd is not None
        before = os.fstat(fd).st_size
        try:
            _write_all(fd, line)
            if durable:
                _sync(fd)
        except OSError:
            if self._regular:
                with suppress(OSError):  # what stays is mended when the file is opened again
                    os.ftruncate(fd, before)
            self.close()
            raise

    def set_aside(self, moment: datetime) -> Path:
        """Rename the file to a part of its own; the next append begins a new one. Returns the part. Raises OSError: the old one goes on.

        Parts are named after the UTC second of ``moment`` and a running number; by name they sort in the order they were set aside, even
        if the clock is put back. No part is ever overwritten.
        """
        self.ready()
        part = self._reserve_part(moment)
        self.close()
        try:
            os.replace(self.path, part)
        except OSError:
            with suppress(OSError):
                part.unlink()
            raise
        _sync_folder(self.path.parent)
        return part

    def close(self) -> None:
        """Close the file; the next append opens it again."""
        fd, self._fd = self._fd, None
        if fd is not None:
            with suppress(OSError):
                os.close(fd)

    def _open(self) -> None:
        fd = os.open(self.path, _FLAGS, 0o666)
        try:
            state = os.fstat(fd)
            self._regular = stat.S_ISREG(state.st_mode)
            if self._regular:
                _lock(fd)
                if state.st_size:
                    self._mend_end(state.st_size)
                if self._header and os.fstat(fd).st_size == 0:
                    _write_all(fd, self._header)
                if state.st_size == 0:
                    self.newest = b""
                    _sync_folder(self.path.parent)
        except BaseException:
            os.close(fd)
            raise
        self._fd = fd

    def _still_there(self, fd: int) -> bool:
        try:
            there, open_ = self.path.stat(), os.fstat(fd)
        except OSError:
            return False
        return (there.st_dev, there.st_ino) == (open_.st_dev, open_.st_ino)

    def _mend_end(self, size: int) -> None:
        with self.path.open("r+b") as file:
            start = max(size - _TAIL, 0)
            file.seek(start)
            tail = file.read()
            cut = tail.rfind(b"\n") + 1
            whole, fragment = tail[:cut], tail[cut:]
            self.newest = whole[whole.rfind(b"\n", 0, -1) + 1 :]
            if not fragment:
                return
            file.seek(start + cut)
            file.write(self._mend(fragment) if cut or not start else fragment + b"\n")
            file.truncate()

    def _reserve_part(self, moment: datetime) -> Path:
        """Make an empty file of the next part's name, so that nobody else takes the name."""
        stem, suffix = self.path.stem, self.path.suffix
        pattern = re.compile(rf"{re.escape(stem)}\.(\d{{8}}T\d{{6}}Z)-(\d{{6,}}){re.escape(suffix)}")
        found = [match.groups() for name in os.listdir(self.path.parent) if (match := pattern.fullmatch(name))]
        stamp, number = moment.astimezone(UTC).strftime("%Y%m%dT%H%M%SZ"), 1
        if found:
            last_stamp, last_number = max((then, int(count)) for then, count in found)
            if last_stamp >= stamp:
                stamp, number = last_stamp, last_number + 1
        while True:
            part = self.path.with_name(f"{stem}.{stamp}-{number:06d}{suffix}")
            try:
                os.close(os.open(part, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o666))
            except FileExistsError:
                number += 1
            else:
                return part


def _write_all(fd: int, content: bytes) -> None:
    view = memoryview(content)
    while view:
        written = os.write(fd, view)
        if not written:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        view = view[written:]


def _sync(fd: int) -> None:
    try:
        os.fsync(fd)
    except OSError as error:
        if error.errno not in _CANNOT_SYNC or stat.S_ISREG(os.fstat(fd).st_mode):
            raise


def _sync_folder(folder: Path) -> None:
    """Put a new name on the disk, where the system can."""
    with suppress(OSError):
        fd = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(fd)
        finally:
            os.close(fd)


def _lock(fd: int) -> None:
    if sys.platform == "win32":
        return
    try:
        fcntl.flock(fd, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        raise
    except OSError:
        return  # a file system without locks
