"""Mistakes of a command or of a program that builds circuits, when every file is right."""

from loopsim.language.rules.entry import Example, Mistake, mistake

_GOOD = "let level = 1 V in 0 V .. 2 V\ngnd -> v1: level -> a\na -- r1: 1 kohm -- gnd\n"
_BUILD = "from loopsim.build import CircuitBuilder, waveform\nb = CircuitBuilder('example')\n"


def _program(text: str) -> Example:
    return Example(program=_BUILD + text)


OUTSIDE: tuple[Mistake, ...] = (
    mistake(
        "missing-file", "The file is there.", "look at the path", Example(_GOOD, words=("states", "exampel.loop"))
    ),
    mistake("is-a-folder", "A circuit is in a file.", "name a file in it", Example(_GOOD, words=("states", "."))),
    mistake(
        "cannot-read",
        "The file can be read.",
        "look at its permissions",
        Example(_GOOD, words=("trace", "FILE", "--along", "level", "--overlay", "nothing.csv")),
    ),
    mistake(
        "wrong-value",
        "A value on the command line is a quantity in the unit of its let.",
        "write it as 4.5V, 4K7 or 60degC",
        Example(_GOOD, words=("states", "FILE", "--set", "level=3ohm")),
        Example(_GOOD, words=("states", "FILE", "--set", "level=high")),
    ),
    mistake(
        "wrong-table",
        "A table of measured points has a column for the let and one for a net, in rows of numbers.",
        "for example: 4.5, 0.02",
        Example(_GOOD, files={"points.csv": "level\n1\n"}, words=("trace", "FILE", "--along", "level", "--overlay", "points.csv")),
    ),
    mistake(
        "setting-value",
        "A setting in a program is a finite number, or an array of them.",
        "give a float or an array of floats",
        _program("b.let('level', 1.0)\nb.chain('gnd', 'v1', 'a', device='voltage_source', voltage=1.0)\n"
                 "b.circuit().states(level='high')"),
    ),
    mistake(
        "setting-shape",
        "Arrays among the settings have one length.",
        "all arrays of a batch have one length",
        _program("b.let('level', 1.0)\nb.chain('gnd', 'v1', 'a', device='voltage_source', voltage=1.0)\n"
                 "from loopsim.equations.assemble import parameter_values\n"
                 "parameter_values(b.circuit(), {'level': [[1.0], [2.0]]})"),
    ),
    mistake(
        "field-kind",
        "A field in a program is given a number, a word, a curve or a waveform, as the field says.",
        "see docs/reference/devices.md",
        _program("b.chain('gnd', 'r1', 'a', device='resistor', resistance='large')\nb.circuit().states()"),
    ),
    mistake(
        "unknown-waveform",
        "Waveforms are sine, square, ramp and points.",
        "there are sine, square, ramp, points",
        _program("b.chain('gnd', 'v1', 'a', device='voltage_source', voltage=waveform('saw', high=1.0))\nb.circuit().states()"),
    ),
)  # fmt: skip
