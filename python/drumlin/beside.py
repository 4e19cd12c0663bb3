"""Files and folders on the way: written beside their place under a hidden name, then renamed or removed.

The name holds the number of the process that writes, and that process holds a lock on the file as long as it lives.
What a killed process left behind is thus known for certain: nobody holds its lock, and no process of that number runs.
"""

from __future__ import annotations

import contextlib
import errno
import os
import re
import secrets
import shutil

from drumlin.errors import TargetError

try:
    import fcntl
except ImportError:  # pragma: no cover - a system without these locks: nothing is ever swept there
    fcntl = None  # type: ignore[assignment]

__all__ = ["Beside", "sweep", "unwritable", "write_whole"]

_NAME = re.compile(r"\..+\.drumlin-(\d+)-[0-9a-f]{8}\.part")


class Beside:
    """A new hidden file or folder for `name` in `folder`, locked by this process until `release` or `remove`.

    `path` is where it is. The file is empty; whoever writes it opens it by its path.

    Raises OSError when it cannot be made.
    """

    def __init__(self, folder: str, name: str, *, is_folder: bool = False) -> None:
        self._descriptor = -1
        self._is_folder = is_folder
        self._owner = os.getpid()
        while True:
            token = f"drumlin-{os.getpid()}-{secrets.token_hex(4)}.part"
            self.path = os.path.join(folder, f".{name}.{token}")
            if len(os.fsencode(os.path.basename(self.path))) > 255:  # the longest name that file systems take
                self.path = os.path.join(folder, f".{name[:40]}.{token}")
            try:
                if is_folder:
                    os.mkdir(self.path)
                    self._descriptor = os.open(self.path, os.O_RDONLY)
                else:
                    self._descriptor = os.open(self.path, os.O_RDWR | os.O_CREAT | os.O_EXCL, 0o666)
                if _lock(self._descriptor) is not False and os.path.exists(self.path):
                    return
            except FileExistsError:
                continue
            except FileNotFoundError:
                if not os.path.isdir(folder):
                    raise
            self.release()

    def release(self) -> None:
        """Give up the lock: the file is no longer this process's, having been renamed."""
        descriptor, self._descriptor = self._descriptor, -1
        if descriptor >= 0:
            os.close(descriptor)

    def remove(self) -> None:
        """Remove what is still there under the hidden name, and give up the lock. May be called again.

        In a forked child it removes nothing: the file is its parent's.
        """
        if self._descriptor >= 0 and self._owner == os.getpid():
            _delete(self.path, self._is_folder)
        self.release()


def sweep(folder: str) -> None:
    """Remove what killed processes have left in `folder`; what a living one writes stays, and so does all else.

    Never raises: what cannot be looked at or removed stays.
    """
    try:
        names = [entry.name for entry in os.scandir(folder) if _NAME.fullmatch(entry.name)]
    except OSError:
        return
    for name in names:
        found = _NAME.fullmatch(name)
        if found is None or _is_alive(int(found[1])):
            continue
        path = os.path.join(folder, name)
        with contextlib.suppress(OSError):
            descriptor = os.open(path, os.O_RDONLY | os.O_NOFOLLOW)
            try:
                if _lock(descriptor):
                    _delete(path, os.path.isdir(path))
            finally:
                os.close(descriptor)


def write_whole(target: str, data: bytes) -> None:
    """Write a file whole or not at all: beside its place, then renamed over what may be there.

    Raises TargetError when it cannot be written.
    """
    folder, name = os.path.split(os.path.abspath(target))
    sweep(folder)
    beside: Beside | None = None
    try:
        beside = Beside(folder, name)
        with open(beside.path, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        os.replace(beside.path, target)
        beside.release()
    except BaseException as error:
        if beside is not None:
            beside.remove()
        if isinstance(error, OSError):
            raise unwritable(target, error) from error
        raise


def unwritable(path: str, error: OSError) -> TargetError:
    """Return the error that says why `path` cannot be written, in words, and what to do where the disk is full."""
    code = error.errno
    reason = os.strerror(code) if code is not None else str(error).strip() or type(error).__name__
    advice = ""
    if code in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG):
        advice = " What was there before is as it was. Make room, or choose a place with more."
    return TargetError(f"{path} cannot be written: {reason}.{advice}", file=path)


def _lock(descriptor: int) -> bool | None:
    """Take the lock: True when it was free, False when somebody holds it, None where there are no locks."""
    if fcntl is None:
        return None
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    except OSError:
        return None
    return True


def _is_alive(number: int) -> bool:
    try:
        os.kill(number, 0)
    except ProcessLookupError:
        return False
    except (OSError, OverflowError):
        return True
    return True


def _delete(path: str, is_folder: bool) -> None:
    if is_folder:
        shutil.rmtree(path, ignore_errors=True)
    else:
        with contextlib.suppress(OSError):
            os.unlink(path)
