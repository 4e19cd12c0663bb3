"""Reading in a helper thread, a few batches ahead of the computation."""

from __future__ import annotations

import contextlib
import queue
import threading
from collections.abc import Iterator
from typing import Generic, TypeVar

T = TypeVar("T")

_LOOK = 0.1
"""Seconds after which a waiting side looks whether the other one is gone."""


_PATIENCE = 0.25
"""Seconds that `close` waits for the reader to come out."""


class _End:
    def __init__(self, error: BaseException | None) -> None:
        self.error = error


class ReadAhead(Generic[T]):
    """Yields the items of an iterator that a daemon thread reads at most `depth` items ahead.

    An exception of the iterator comes through as it is. `close` abandons the thread, so that an interrupt is seen at
    once even while a file is being decoded.
    """

    def __init__(self, items: Iterator[T], depth: int = 2) -> None:
        self._queue: queue.Queue[T | _End] = queue.Queue(maxsize=depth)
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._read, args=(items,), name="drumlin-read", daemon=True)
        self._thread.start()

    def _read(self, items: Iterator[T]) -> None:
        error: BaseException | None = None
        try:
            for item in items:
                if not self._put(item):
                    return
        except BaseException as raised:
            error = raised
        finally:
            close = getattr(items, "close", None)
            if close is not None:
                with contextlib.suppress(Exception):
                    close()
        self._put(_End(error))

    def _put(self, item: T | _End) -> bool:
        while not self._stop.is_set():
            try:
                self._queue.put(item, timeout=_LOOK)
                return True
            except queue.Full:
                continue
        return False

    def __iter__(self) -> Iterator[T]:
        while True:
            try:
                item = self._queue.get(timeout=_LOOK)
            except queue.Empty:
                continue
            if isinstance(item, _End):
                if item.error is not None:
                    raise item.error
                return
            yield item

    def close(self) -> None:
        """Let the thread go; it ends after the item it is reading, for which there is a moment's wait.

        A thread that is still inside the reader's own code when the interpreter ends would bring the process down.
        """
        self._stop.set()
        if threading.current_thread() is not self._thread:
            self._thread.join(_PATIENCE)
