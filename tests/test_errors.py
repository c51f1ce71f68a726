"""How mistakes are shown: place, line, caret, hint, and nothing that could act on a terminal."""

from loopsim.errors import CircuitError, Span
from loopsim.printable import cell_width, one_column, printable


def test_an_error_shows_place_line_caret_and_hint() -> None:
    line = "kind clamp = diode(saturation_curent = 10 fA)"
    span = Span("circuits/latch.loop", 7, 20, 37, line)
    error = CircuitError("unknown-field", "a diode has no field `saturation_curent`", span, "did you mean `saturation_current`?")
    assert str(error).splitlines() == [
        "circuits/latch.loop:7:20: unknown-field: a diode has no field `saturation_curent`",
        "    7 | kind clamp = diode(saturation_curent = 10 fA)",
        "      |                    ^^^^^^^^^^^^^^^^^ did you mean `saturation_current`?",
    ]
    assert (error.file, error.line, error.column) == ("circuits/latch.loop", 7, 20)


def test_an_error_without_a_place_shows_message_and_hint() -> None:
    assert str(CircuitError("empty-file", "nothing to read", hint="write a circuit")) == (
        "empty-file: nothing to read\n    write a circuit"
    )


def test_escapes_in_file_name_message_hint_and_line_stay_inert() -> None:
    span = Span("a\x1b[31m\nb.loop", 1, 3, 4, "ab\x1b[2J\u202e\u0007")
    shown = str(CircuitError("strange", "bad \x1b]0;x\x07 name\r", span, "try\x00that"))
    assert all(c == "\n" or c.isprintable() for c in shown)
    assert len(shown.splitlines()) == 3


def test_the_caret_stands_under_its_place_after_wide_characters_and_tabs() -> None:
    line = "\t水槽 -- r: 1 hm"
    column = line.index("hm") + 1
    shown = str(CircuitError("unknown-unit", "no unit `hm`", Span("x.loop", 1, column, column + 2, line))).splitlines()
    assert cell_width(shown[2][: shown[2].index("^")]) == cell_width(shown[1][: shown[1].index("hm")])
    assert shown[2].count("^") == 2


def test_a_long_line_is_cut_around_the_place() -> None:
    line = "a" * 5000 + "?" + "b" * 5000
    _, text, caret = str(CircuitError("c", "m", Span("x", 1, 5001, 5002, line))).splitlines()
    assert len(text) < 200
    assert text[caret.index("^")] == "?"


def test_a_place_past_the_end_of_the_line_still_gets_a_caret() -> None:
    assert str(CircuitError("c", "m", Span("x", 1, 9, 9, "ab"))).endswith("^")


def test_printable_keeps_letters_of_all_scripts_and_escapes_the_rest() -> None:
    assert printable("Zisterne µ Ω 水") == "Zisterne µ Ω 水"
    assert printable("a\x1b\n\x9b\u202e\ud800") == "a\\x1b\\n\\x9b\\u202e\\ud800"
    assert one_column("a\tb\x1bc") == "a b?c"
