"""Numbers as an engineer writes them: a few significant digits and an SI prefix whose exponent is a multiple of three."""

from __future__ import annotations

import math

PREFIXES = {-15: "f", -12: "p", -9: "n", -6: "u", -3: "m", 0: "", 3: "k", 6: "M", 9: "G", 12: "T"}

# Units that take no prefix: they are ratios, scales of their own, or printed as plain numbers.
PLAIN_UNITS = frozenset({"", "%", "ppm", "dB", "degC", "1", "deg", "rad"})


def significant(value: float, digits: int) -> str:
    """`value` rounded to `digits` significant digits, zeros kept, without an exponent: 3.714, 20.00, 310."""
    if value == 0.0:
        return "0"
    exponent = math.floor(math.log10(abs(value)))
    rounded = round(value, digits - 1 - exponent)
    if rounded != 0.0:
        exponent = math.floor(math.log10(abs(rounded)) + 1e-12)
    return f"{rounded:.{max(0, digits - 1 - exponent)}f}"


def engineering(value: float | None, unit: str = "", digits: int = 4) -> str:
    """`value` [SI] with its unit: 20.00 mV, 3.714 V, -310 k/s for unit "1/s". "-" for None, the word for inf and nan.

    A value outside the prefixes of the language (f to T) is written with a power of ten.
    """
    if value is None:
        return "-"
    value = float(value)
    shown = "/" + unit[2:] if unit.startswith("1/") else unit
    if not math.isfinite(value) or value == 0.0:
        number = "0" if value == 0.0 else str(value)
        return f"{number} {shown}".rstrip()
    if unit in PLAIN_UNITS:
        plain = significant(value, digits) if 1e-4 <= abs(value) < 1e7 else f"{value:.{digits - 1}e}"
        return f"{plain} {'' if unit == '1' else unit}".rstrip()
    # rounding first, so that 999.96 mV becomes 1.000 V and not 1000 mV
    mantissa = float(f"{value:.{digits - 1}e}")
    exponent = 3 * math.floor(math.log10(abs(mantissa)) / 3 + 1e-12)
    if exponent not in PREFIXES:
        return f"{value:.{digits - 1}e} {shown}"
    # a prefix belongs to the unit behind it: mA/V^2 is fine, mV^2 and mV^-1 would be something else
    if not unit.startswith("1/") and not unit.partition("/")[0].isalpha():
        plain = significant(value, digits) if 1e-3 <= abs(value) < 1e6 else f"{value:.{digits - 1}e}"
        return f"{plain} {shown}"
    return f"{significant(mantissa / 10.0**exponent, digits)} {PREFIXES[exponent]}{shown}"


def signed(value: float | None, unit: str = "", digits: int = 4) -> str:
    """As `engineering`, with a plus sign before what is above zero."""
    text = engineering(value, unit, digits)
    return "+" + text if value is not None and value > 0.0 else text


def shortest(value: float, unit: str = "", digits: int = 12) -> str:
    """`value` with as few digits as say it to `digits` significant ones: 4.5 V, 22 kohm, 1 kV. For what a person typed in."""
    text = engineering(value, unit, digits)
    number, _, rest = text.partition(" ")
    mantissa, mark, power = number.partition("e")
    if "." in mantissa:
        mantissa = mantissa.rstrip("0").rstrip(".")
    return f"{mantissa}{mark}{power} {rest}".rstrip()
