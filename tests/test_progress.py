"""What a run tells of itself while it runs."""

import io
import json

import pytest

from geofractal import progress
from geofractal.progress import JsonProgress, PlainProgress, Progress, TerminalProgress, make_progress


@pytest.fixture
def clock(monkeypatch):
    """A clock that the test moves by hand."""

    class Clock:
        now = 1000.0

        def tick(self, seconds):
            self.now += seconds

    clock = Clock()
    monkeypatch.setattr(progress.time, "monotonic", lambda: clock.now)
    return clock


def lines_of(stream):
    return stream.getvalue().splitlines()


def test_a_short_stage_is_one_plain_line(clock):
    stream = io.StringIO()
    with PlainProgress(stream).stage("shore", "divider-dimension", 1200) as stage:
        for _ in range(12):
            clock.tick(0.25)
            stage.advance(100)
    assert lines_of(stream) == ["shore: divider-dimension: 1,200 features in 3.0 s"]


def test_a_line_every_thirty_seconds_tells_share_rate_and_time_left(clock):
    stream = io.StringIO()
    with PlainProgress(stream).stage("shore", "reading", 100_000, "rows") as stage:
        for _ in range(30):
            clock.tick(1)
            stage.advance(100)
    running = lines_of(stream)[0]
    # 3,000 rows in 30 s are 100 a second, so 97,000 more take 970 s
    assert running == "shore: reading: 3%, 3,000 of 100,000 rows, 100/s, 16 min 10 s left"


def test_lines_come_sooner_where_much_is_done_but_never_in_a_flood(clock):
    stream = io.StringIO()
    with PlainProgress(stream).stage("shore", "reading", 100) as stage:
        for _ in range(100):
            clock.tick(1)
            stage.advance(1)
    # each 5 % takes 5 s here: a line at 5, 10 ... 95 %, and the closing one
    assert len(lines_of(stream)) == 19 + 1


def test_an_unknown_total_gives_no_share_and_no_time_left(clock):
    stream = io.StringIO()
    with PlainProgress(stream).stage("shore", "joining", None) as stage:
        clock.tick(31)
        stage.advance(31)
    assert lines_of(stream)[0] == "shore: joining: 31 features, 1/s"


def test_a_stage_that_fails_says_where_it_stopped(clock):
    stream = io.StringIO()

    def fail():
        with PlainProgress(stream).stage("shore", "reading", 10) as stage:
            clock.tick(1)
            stage.advance(4)
            raise ValueError("boom")

    with pytest.raises(ValueError, match="boom"):
        fail()
    assert lines_of(stream) == ["shore: reading: stopped after 4 features in 1.0 s"]


@pytest.mark.parametrize(("details", "expected"), [(False, 1), (True, 3)])
def test_details_add_beginnings_and_notes(details, expected):
    stream = io.StringIO()
    shown = PlainProgress(stream, details=details)
    with shown.stage("shore", "reading", 1) as stage:
        shown.note("shore: azimuthal plane")
        stage.advance()
    assert len(lines_of(stream)) == expected


def test_json_lines_are_objects_and_at_most_one_a_second(clock):
    stream = io.StringIO()
    with JsonProgress(stream).stage("Küste", "reading", 1000) as stage:
        for _ in range(100):
            clock.tick(0.1)
            stage.advance(10)
    events = [json.loads(line) for line in lines_of(stream)]
    assert [event["event"] for event in events] == ["begin", *["progress"] * (len(events) - 2), "end"]
    assert len(events) - 2 <= 10
    assert events[-1] | {"layer": "Küste", "done": 1000, "total": 1000, "stopped": False} == events[-1]


def test_the_silent_one_says_nothing(capsys):
    shown = make_progress("none")
    with shown.stage("shore", "reading", 1) as stage:
        stage.advance()
    shown.note("detail")
    assert capsys.readouterr() == ("", "")
    assert stage.done == 1


@pytest.mark.parametrize(
    ("style", "is_terminal", "term", "kind"),
    [
        ("auto", True, "xterm-256color", TerminalProgress),
        ("auto", True, "dumb", PlainProgress),
        ("auto", False, "xterm-256color", PlainProgress),
        ("plain", True, "xterm-256color", PlainProgress),
        ("json", True, "xterm-256color", JsonProgress),
        ("none", True, "xterm-256color", Progress),
    ],
)
def test_the_style_follows_the_stream(monkeypatch, style, is_terminal, term, kind):
    monkeypatch.setattr("sys.stderr.isatty", lambda: is_terminal, raising=False)
    monkeypatch.setenv("TERM", term)
    assert type(make_progress(style)) is kind


@pytest.mark.parametrize("no_colour", [True, False])
def test_the_moving_line_heeds_no_color(monkeypatch, no_colour):
    """NO_COLOR (no-color.org): its presence, whatever its value, asks for no colour."""
    monkeypatch.setenv("TERM", "xterm-256color")
    monkeypatch.setenv("COLUMNS", "120")
    monkeypatch.delenv("NO_COLOR", raising=False)
    if no_colour:
        monkeypatch.setenv("NO_COLOR", "1")
    stream = io.StringIO()
    stream.isatty = lambda: True
    monkeypatch.setattr("sys.stderr", stream)
    shown = TerminalProgress()
    with shown.stage("shore [a]", "reading", 2) as stage:
        stage.advance(1)
        shown._bars.refresh()
    text = stream.getvalue()
    assert "shore [a]: reading" in text
    assert "1 of 2 features" in text
    colours = any(f"\x1b[3{digit}" in text for digit in range(9))
    assert colours is not no_colour


@pytest.mark.parametrize(
    ("seconds", "words"), [(0.44, "0.4 s"), (12.4, "12 s"), (185, "3 min 5 s"), (7800, "2 h 10 min")]
)
def test_durations_in_words(seconds, words):
    assert progress.duration(seconds) == words
