"""The progress line and its events."""

from __future__ import annotations

import io
import sys
import threading
from typing import Any

import pytest

from drumlin.engines.progress import Reporter


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def test_events_tell_what_rows_pass_and_gain() -> None:
    events: list[dict[str, Any]] = []
    reporter = Reporter(events.append)
    reporter.start("first look", 100)
    reporter.update(40)
    reporter.update(40)
    reporter.update(140)
    reporter.finish()
    reporter.facts(passes=2, gain=0.25)
    reporter.start("pass", None)
    reporter.update(7)
    reporter.finish()
    reporter.close()
    assert [(event["what"], event["rows"], event["total"], event["done"]) for event in events] == [
        ("first look", 0, 100, False),
        ("first look", 40, 100, False),
        ("first look", 100, 100, False),
        ("first look", 100, 100, True),
        ("pass", 0, None, False),
        ("pass", 7, None, False),
        ("pass", 7, None, True),
    ]
    assert events[-1]["passes"] == 2 and events[-1]["gain"] == 0.25 and events[-1]["seconds"] >= 0


def test_an_error_in_the_callable_comes_through() -> None:
    def broken(event: dict[str, Any]) -> None:
        raise RuntimeError("enough")

    with pytest.raises(RuntimeError, match="enough"):
        Reporter(broken).start("pass", 3)


def test_one_line_on_a_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    terminal = Terminal()
    monkeypatch.setattr(sys, "stderr", terminal)
    before = threading.active_count()
    reporter = Reporter(True)
    reporter.facts(passes=3, gain=0.0125)
    reporter.start("pass", 2000)
    reporter.facts(passes=3, gain=0.0125)
    reporter.update(1000)
    reporter.pulse("8 tries on the sample")
    reporter.pulse("8 tries on the sample")
    reporter.close()
    text = terminal.getvalue()
    assert "pass 3" in text and "2.00k" in text and "gain 0.013 nats/row" in text and "8 tries on the sample" in text
    assert "\n" not in text and threading.active_count() == before


@pytest.mark.parametrize("progress", [True, False])
def test_nothing_is_written_where_no_one_looks(monkeypatch: pytest.MonkeyPatch, progress: bool) -> None:
    stream = io.StringIO() if progress else Terminal()
    monkeypatch.setattr(sys, "stderr", stream)
    reporter = Reporter(progress)
    reporter.start("pass", 10)
    reporter.update(5)
    reporter.finish()
    reporter.close()
    assert stream.getvalue() == ""
