"""Numbers as an engineer writes them. Prefixes: SI brochure, 9th edition, table 7 (from memory)."""

import math

import numpy as np
import pytest

from loopsim.output.engineering import PREFIXES, engineering, shortest, signed, significant


@pytest.mark.parametrize(
    ("value", "unit", "digits", "text"),
    [
        (0.02, "V", 4, "20.00 mV"),
        (3.714, "V", 4, "3.714 V"),
        (-310e3, "1/s", 3, "-310 k/s"),
        (1.23e6, "1/s", 2, "1.2 M/s"),
        (0.99996, "V", 4, "1.000 V"),
        (999.96, "ohm", 4, "1.000 kohm"),
        (9.9996, "V", 4, "10.00 V"),
        (4.7e-9, "F", 2, "4.7 nF"),
        (1e-15, "A", 3, "1.00 fA"),
        (9.9e15, "Hz", 2, "9.9e+15 Hz"),
        (1e-20, "V", 4, "1.000e-20 V"),
        (25.0, "degC", 4, "25.00 degC"),
        (0.5, "", 2, "0.50"),
        (0.003, "A/V^2", 2, "3.0 mA/V^2"),
        (3e6, "V/s", 2, "3.0 MV/s"),
        (0.05, "V^-1", 2, "0.050 V^-1"),
        (1e-9, "V^2", 2, "1.0e-09 V^2"),
        (0.0, "V", 4, "0 V"),
        (-0.0, "V", 4, "0 V"),
    ],
)
def test_a_value_gets_its_prefix_and_its_digits(value: float, unit: str, digits: int, text: str) -> None:
    assert engineering(value, unit, digits) == text


def test_what_is_unknown_or_not_finite_is_said_in_a_word() -> None:
    assert engineering(None, "V") == "-"
    assert engineering(math.inf, "V") == "inf V"
    assert engineering(math.nan, "V") == "nan V"


def test_a_sign_stands_before_growth() -> None:
    assert signed(1.2e6, "1/s", 2) == "+1.2 M/s"
    assert signed(-1.2e6, "1/s", 2) == "-1.2 M/s"
    assert signed(0.0, "1/s") == "0 /s"
    assert signed(None, "1/s") == "-"


@pytest.mark.parametrize(
    ("value", "unit", "text"),
    [(4.5, "V", "4.5 V"), (22e3, "ohm", "22 kohm"), (1000.0, "V", "1 kV"), (0.009, "s", "9 ms"), (100.0, "", "100")],
)
def test_a_typed_value_comes_back_as_typed(value: float, unit: str, text: str) -> None:
    assert shortest(value, unit) == text


def test_every_text_reads_back_to_the_value_within_its_digits() -> None:
    scale = {prefix: 10.0**exponent for exponent, prefix in PREFIXES.items()}
    generator = np.random.default_rng(5)
    values = generator.choice([-1.0, 1.0], 2000) * 10.0 ** generator.uniform(-14.9, 14.9, 2000)
    for value in values:
        for digits in (2, 4):
            number, unit = engineering(float(value), "V", digits).split()
            read = float(number) * scale[unit.removesuffix("V")]
            assert read == pytest.approx(value, rel=0.51 * 10.0 ** (1 - digits))
            mantissa = abs(float(number))
            assert 1.0 <= mantissa < 1000.0


def test_significant_digits_keep_their_zeros() -> None:
    assert significant(20.0, 4) == "20.00"
    assert significant(310.0, 2) == "310"
    assert significant(0.0996, 2) == "0.10"
