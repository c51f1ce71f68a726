"""Colour is judged for each stream by itself."""

import io

import pytest

from loopsim.output.terminal import PLAIN, Palette, is_terminal, line_width, palette_for


class Watched(io.StringIO):
    """A stream that says it is a terminal."""

    def isatty(self) -> bool:
        return True


@pytest.mark.parametrize(
    ("stream", "environment", "wish", "active"),
    [
        (Watched(), {"TERM": "xterm"}, "auto", True),
        (Watched(), {"TERM": "xterm", "NO_COLOR": ""}, "auto", True),
        (Watched(), {"TERM": "xterm", "NO_COLOR": "0"}, "auto", False),
        (Watched(), {"TERM": "dumb"}, "auto", False),
        (Watched(), {"TERM": "xterm"}, "never", False),
        (io.StringIO(), {"TERM": "xterm"}, "auto", False),
    ],
)
def test_colour_needs_a_terminal_that_wants_it(stream, environment, wish: str, active: bool) -> None:
    assert palette_for(stream, environment, wish).active is active


def test_a_closed_stream_is_no_terminal() -> None:
    stream = Watched()
    stream.close()
    real = io.StringIO()
    real.close()
    assert palette_for(real, {}, "auto") == PLAIN
    assert not is_terminal(real)


def test_a_plain_palette_changes_nothing() -> None:
    for mark in (PLAIN.strong, PLAIN.faint, PLAIN.calm, PLAIN.alarm):
        assert mark("x") == "x"
    assert Palette(active=True).strong("") == ""
    assert Palette(active=True).strong("x") == "\x1b[1mx\x1b[0m"


def test_a_line_has_a_width_without_a_terminal() -> None:
    assert line_width() >= 40
