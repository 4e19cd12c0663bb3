"""Progress: one line on standard error while a pass runs, and events for a callable."""

from __future__ import annotations

import math
import sys
import time
from collections.abc import Callable
from typing import Any

__all__ = ["Progress", "Reporter"]

Progress = bool | Callable[[dict[str, Any]], None]


class Reporter:
    """Says how far a run has come.

    Args:
        progress: True for a line on standard error when that is a terminal, False for none, or a callable that gets a
        dict
            for each event: `what`, `rows`, `total` (or None), `passes` (number of this pass or None), `gain` (nats
            per row of the pass before, or None), `seconds` since the pass began, `done`. An exception in the callable
            ends the run.

    The line holds what is being done, rows done of all rows, rows per second, time left of this pass, and whatever
    `facts` was given: the number of the pass, the gain.

    >>> events = []
    >>> reporter = Reporter(events.append)
    >>> reporter.start("looking", 10)
    >>> reporter.update(4)
    >>> reporter.finish()
    >>> [(event["what"], event["rows"], event["done"]) for event in events]
    [('looking', 0, False), ('looking', 4, False), ('looking', 4, True)]
    """

    def __init__(self, progress: Progress = True) -> None:
        self._callback = progress if callable(progress) else None
        self._shown = progress is True and sys.stderr is not None and sys.stderr.isatty()
        self._bar: Any = None
        self._what = ""
        self._rows = 0
        self._total: int | None = None
        self._passes: int | None = None
        self._gain: float | None = None
        self._began = 0.0

    def facts(self, *, passes: int | None = None, gain: float | None = None) -> None:
        """Say which pass comes next and what the one before gained, in nats per row; shown from then on."""
        self._passes, self._gain = passes, gain
        self._describe()

    def start(self, what: str, total: int | None) -> None:
        """Begin a pass over `total` rows (None: unknown)."""
        self._what, self._rows, self._total, self._began = what, 0, total, time.monotonic()
        if self._shown:
            if self._bar is None:
                self._bar = _bar(total)
            else:
                self._bar.reset(total=total)
            self._describe()
        self._emit(done=False)

    def update(self, rows: int) -> None:
        """Say that `rows` rows of the pass are done."""
        if self._total is not None:
            rows = min(rows, self._total)
        if rows == self._rows:
            return
        self._rows = rows
        if self._bar is not None:
            self._bar.update(rows - self._bar.n)
        self._emit(done=False)

    def pulse(self, text: str) -> None:
        """Say what is being done between passes, where no rows are counted."""
        if text != self._what:
            self.start(text, None)

    def finish(self) -> None:
        """End the pass; the line stays for the next one."""
        self._emit(done=True)

    def close(self) -> None:
        """Clear the line."""
        if self._bar is not None:
            self._bar.close()
            self._bar = None

    def _describe(self) -> None:
        if self._bar is None:
            return
        text = self._what if self._passes is None else f"{self._what} {self._passes}"
        self._bar.set_description_str(text, refresh=False)
        gain = "" if self._gain is None or not math.isfinite(self._gain) else f"gain {self._gain:.2g} nats/row"
        self._bar.set_postfix_str(gain, refresh=True)

    def _emit(self, *, done: bool) -> None:
        if self._callback is not None:
            self._callback(
                {
                    "what": self._what,
                    "rows": self._rows,
                    "total": self._total,
                    "passes": self._passes,
                    "gain": self._gain,
                    "seconds": time.monotonic() - self._began,
                    "done": done,
                }
            )


def _bar(total: int | None) -> Any:
    """Make the line, without the helper thread and the cross-process lock that it would bring along."""
    import threading

    from tqdm import tqdm

    line: Any = type("Line", (tqdm,), {"monitor_interval": 0})
    line.set_lock(threading.RLock())
    return line(total=total, unit=" rows", unit_scale=True, file=sys.stderr, leave=False, dynamic_ncols=True)
