"""The progress line: what it says, and that it goes away."""

from __future__ import annotations

import io

import pytest

from preview.engine.progress import Progress


class Terminal(io.StringIO):
    def isatty(self) -> bool:
        return True


def test_it_says_what_is_done_how_much_and_how_long_it_takes(monkeypatch: pytest.MonkeyPatch) -> None:
    now_s = [100.0]
    monkeypatch.setattr("preview.engine.progress.time.monotonic", lambda: now_s[0])
    terminal = Terminal()
    progress = Progress(1000, terminal)
    now_s[0] = 103.0
    progress(250, "2 of 9 files")
    assert terminal.getvalue().startswith("\r2 of 9 files  25 %  ")
    assert "9 s left" in terminal.getvalue()
    now_s[0] = 103.05
    progress(300, "3 of 9 files")  # too soon to be written again
    assert "3 of 9" not in terminal.getvalue()
    progress.clear()
    assert terminal.getvalue().endswith("\r")
    assert max(len(line) for line in terminal.getvalue().split("\r")) < 80


def test_nothing_is_written_where_there_is_no_terminal() -> None:
    pipe = io.StringIO()
    progress = Progress(1000, pipe)
    progress(500, "1 of 2 files")
    progress.clear()
    assert pipe.getvalue() == ""
