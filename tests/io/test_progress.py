"""Progress on standard error and in the log."""

import io

import pytest

from daraf.io import progress as progress_module
from daraf.io.progress import Log, PlainProgress, Silence, TerminalProgress, duration, progress_for


class Terminal(io.StringIO):
    """Text stream that says it is a terminal."""

    def isatty(self):
        return True


def test_plain_lines_with_the_time_left(monkeypatch):
    now = [100.0]
    monkeypatch.setattr(progress_module.time, "monotonic", lambda: now[0])
    stream = io.StringIO()
    show = PlainProgress(stream, interval=5.0)
    for second in range(13):
        now[0] = 100.0 + second
        show("matrix", second, 20, "pass 1")
    show("pass", 1, 0, "pass 1 done")
    assert stream.getvalue().splitlines() == [
        "matrix (pass 1)",
        "matrix: 25 %, about 15 s left (pass 1)",
        "matrix: 50 %, about 10 s left (pass 1)",
        "pass 1 done",
    ]


def test_plain_lines_leave_out_stages_that_pass_quickly(monkeypatch):
    now = [100.0]
    monkeypatch.setattr(progress_module.time, "monotonic", lambda: now[0])
    stream = io.StringIO()
    show = PlainProgress(stream, interval=5.0)
    for stage in ("panels", "matrix", "factorisation"):
        show(stage, 0, 1)
        now[0] += 1.0
    show("pass", 1, 0, "pass 1")
    now[0] += 6.0
    show("matrix", 0, 1, "pass 2")
    assert stream.getvalue().splitlines() == ["panels", "pass 1", "matrix (pass 2)"]


def test_terminal_shows_messages_that_stay():
    stream = Terminal()
    with progress_for(stream) as show:
        assert isinstance(show, TerminalProgress)
        show("matrix", 1, 4, "pass 1")
        show("matrix", 4, 4)
        show("pass", 1, 0, "pass 1 done")
        show("estimate", 1, 2)
    assert "pass 1 done" in stream.getvalue()


def test_choice_of_progress():
    assert type(progress_for(Terminal(), quiet=True)) is Silence
    assert isinstance(progress_for(io.StringIO()), PlainProgress)


def test_log_keeps_stages_and_passes_on():
    seen = []
    log = Log(lambda *report: seen.append(report))
    log("matrix", 0, 2, "pass 1")
    log("matrix", 2, 2, "pass 1")
    log("pass", 1, 0, "pass 1 done")
    log.add("done")
    assert [line.split("  ", 1)[1].strip() for line in map(str.strip, log.lines)] == [
        "matrix (pass 1)",
        "pass 1 done",
        "done",
    ]
    assert len(seen) == 3


@pytest.mark.parametrize(("seconds", "text"), [(0.4, "0 s"), (59, "59 s"), (200, "3 min"), (8000, "2 h 13 min")])
def test_duration(seconds, text):
    assert duration(seconds) == text
