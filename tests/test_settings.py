"""What `--set` understands."""

import pytest

from loopsim.circuit import Circuit, Parameter
from loopsim.cli.reading import let_value, settings
from loopsim.errors import CircuitError
from loopsim.expressions import Number

CIRCUIT = Circuit(
    "cistern",
    parameters={
        "ambient": Parameter("ambient", Number(25.0), "degC"),
        "level": Parameter("level", Number(4.5), "V"),
        "load": Parameter("load", Number(1e3), "ohm"),
        "share": Parameter("share", Number(0.5), ""),
        "slope": Parameter("slope", Number(0.5), "V/s"),
        "r_in.resistance": Parameter("r_in.resistance", Number(1e4), "ohm"),
    },
)


@pytest.mark.parametrize(
    ("name", "text", "value"),
    [
        ("level", "4.5V", 4.5),
        ("level", "4.5 V", 4.5),
        ("level", "-300mV", -0.3),
        ("level", "- 2 V", -2.0),
        ("level", "3", 3.0),
        ("level", "1e-3", 1e-3),
        ("load", "4K7", 4700.0),
        ("load", "2M2", 2.2e6),
        ("load", "22 kohm", 22e3),
        ("ambient", "60degC", 60.0),
        ("ambient", "-20 degC", -20.0),
        ("ambient", "40", 40.0),
        ("share", "5 %", 0.05),
        ("share", "20 dB", 10.0),
        ("slope", "3 V/us", 3e6),
        ("r_in.resistance", "10.1 kohm", 10100.0),
    ],
)
def test_a_value_is_read_as_the_language_reads_it(name: str, text: str, value: float) -> None:
    assert settings(CIRCUIT, [(name, text)]) == {name: pytest.approx(value, rel=1e-15)}


@pytest.mark.parametrize(
    ("name", "text", "said"),
    [
        ("level", "4.5 A", "is in V, and this is in A"),
        ("level", "5 %", "is in V, and this is in a pure number"),
        ("level", "4K7", "is in V, and this is in ohm"),
        ("level", "4.5 v", "`v` is not a unit"),
        ("level", "high", "not a quantity"),
        ("level", "nan", "not a quantity"),
        ("level", "inf V", "not a quantity"),
        ("level", "1_0 V", "not a quantity"),
        ("level", "1e999 V", "too large"),
        ("level", "\u0661 V", "not a quantity"),
        ("level", "1..2 V", "is not a number"),
        ("ambient", "300 K", "set in degC"),
        ("level", "4.5 V V", "not a quantity"),
        ("levle", "4.5 V", "did you mean `level`?"),
        ("zzz", "4.5 V", "its lets: ambient, level, load, share, slope"),
    ],
)
def test_what_cannot_be_is_said(name: str, text: str, said: str) -> None:
    with pytest.raises(CircuitError, match=r"^(wrong-value|unknown-let)") as caught:
        settings(CIRCUIT, [(name, text)])
    assert said in str(caught.value)


def test_the_last_of_several_settings_of_one_let_counts() -> None:
    assert settings(CIRCUIT, [("level", "1 V"), ("level", "2 V")]) == {"level": 2.0}
    assert let_value("2 V", CIRCUIT.parameters["level"], "--over ") == 2.0
