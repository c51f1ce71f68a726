"""SI numbers with units: "9 V", "3 V/us", "4K7" to floats in base units with a dimension.

A dimension is a tuple of exponents of (volt, ampere, second, kelvin). Prefixes and units are case-sensitive; both micro signs count. A code
of IEC 60062 (`4K7`, `2M2`, `100n`) stands for ohm or farad.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from typing import TypeAlias

Dimension: TypeAlias = tuple[int, int, int, int]

NUMBER: Dimension = (0, 0, 0, 0)
VOLT: Dimension = (1, 0, 0, 0)
AMPERE: Dimension = (0, 1, 0, 0)
SECOND: Dimension = (0, 0, 1, 0)
KELVIN: Dimension = (0, 0, 0, 1)
OHM: Dimension = (1, -1, 0, 0)
SIEMENS: Dimension = (-1, 1, 0, 0)
FARAD: Dimension = (-1, 1, 1, 0)
HENRY: Dimension = (1, -1, 1, 0)

UNITS: dict[str, Dimension] = {
    "V": VOLT, "A": AMPERE, "s": SECOND, "K": KELVIN, "ohm": OHM, "S": SIEMENS, "F": FARAD, "H": HENRY,
    "Hz": (0, 0, -1, 0), "W": (1, 1, 0, 0), "J": (1, 1, 1, 0), "C": (0, 1, 1, 0),
}  # fmt: skip
PREFIXES: dict[str, int] = {
    "f": -15, "p": -12, "n": -9, "u": -6, "\u00b5": -6, "\u03bc": -6, "m": -3, "": 0, "k": 3, "M": 6, "G": 9, "T": 12,
}  # fmt: skip
NAMES: dict[Dimension, str] = {
    NUMBER: "", VOLT: "V", AMPERE: "A", SECOND: "s", KELVIN: "K", OHM: "ohm", SIEMENS: "S", FARAD: "F", HENRY: "H",
    (0, 0, -1, 0): "Hz", (1, 1, 0, 0): "W", (1, 1, 1, 0): "J", (0, 1, 1, 0): "C",
}  # fmt: skip

_WORD = r"(?:[fpnu\u00b5\u03bcmkMGT]?(?:ohm|Hz|V|A|s|S|F|H|K|W|J|C)|ppm)"
UNIT_PATTERN = rf"(?:degC|dB|{_WORD}(?:\^-?[0-9]+)?(?:[/*]{_WORD}(?:\^-?[0-9]+)?)*)(?![A-Za-z0-9_])"
CODE_PATTERN = r"(?:[0-9]{1,6}[RKkMGpnu\u00b5\u03bc][0-9]{0,6}|R[0-9]{1,6})(?![A-Za-z0-9_/^*.])"
_CODE = {"R": (0, OHM), "K": (3, OHM), "k": (3, OHM), "M": (6, OHM), "G": (9, OHM), "p": (-12, FARAD), "n": (-9, FARAD),
         "u": (-6, FARAD), "\u00b5": (-6, FARAD), "\u03bc": (-6, FARAD)}  # fmt: skip
MAX_DIGITS = 400
MAX_EXPONENT = 20  # of a unit: V^20 is far beyond any characteristic


@dataclass(frozen=True, slots=True)
class Quantity:
    """value: in SI base units; dimension; scale: "degC" where the number is a temperature in degrees, else ""."""

    value: float
    dimension: Dimension
    scale: str = ""


def decimal(text: str, power: int = 0) -> float:
    """text * 10**power, correctly rounded; ValueError for what is no plain number, or too large or too small for a float."""
    if len(text) > MAX_DIGITS:
        raise ValueError(f"a number of more than {MAX_DIGITS} characters")
    if not re.fullmatch(r"[0-9]+(?:\.[0-9]+)?(?:[eE][+-]?[0-9]+)?", text):
        raise ValueError(f"`{text}` is not a number")
    mantissa, _, exponent = text.lower().partition("e")
    value = float(f"{mantissa}e{int(exponent or 0) + power}")
    if not math.isfinite(value):
        raise ValueError(f"{text} is too large")
    if value == 0.0 and mantissa.strip("0."):
        raise ValueError(f"{text} is too small")
    return value


def unit_of(text: str) -> tuple[int, Dimension]:
    """(power of ten, dimension) of a unit such as `mA/V^3`; ValueError for an unknown one."""
    power, total = 0, [0, 0, 0, 0]
    for sign, word, exponent in re.findall(r"([/*]?)([^/*^]+)(?:\^(-?[0-9]+))?", text):
        if len(exponent) > 3 or abs(int(exponent or 1)) > MAX_EXPONENT:
            raise ValueError(f"the exponent of a unit lies within -{MAX_EXPONENT} .. {MAX_EXPONENT}")
        count = int(exponent or 1) * (-1 if sign == "/" else 1)
        if word == "ppm":
            power -= 6 * count
            continue
        prefix, name = _split(word)
        power += PREFIXES[prefix] * count
        total = [t + count * d for t, d in zip(total, UNITS[name], strict=True)]
    return power, (total[0], total[1], total[2], total[3])


def _split(word: str) -> tuple[str, str]:
    if word in UNITS:
        return "", word
    if word[:1] in PREFIXES and word[1:] in UNITS:
        return word[:1], word[1:]
    raise ValueError(f"`{word}` is not a unit")


def quantity(number: str, unit: str = "") -> Quantity:
    """A number and its unit text; `%` and `ppm` are pure numbers, `dB` a voltage ratio, `degC` a temperature that stands alone."""
    if unit == "":
        return Quantity(decimal(number), NUMBER)
    if unit == "%":
        return Quantity(decimal(number, -2), NUMBER)
    if unit == "dB":
        value = 10.0 ** (decimal(number) / 20.0) if decimal(number) < 6000.0 else math.inf
        if not math.isfinite(value):
            raise ValueError(f"{number} dB is too large")
        return Quantity(value, NUMBER)
    if unit == "degC":
        return Quantity(decimal(number), KELVIN, "degC")
    power, dimension = unit_of(unit)
    return Quantity(decimal(number, power), dimension)


def code(text: str) -> Quantity:
    """A bare code of IEC 60062: the letter stands where the point would."""
    letter = next(c for c in text if not c.isdigit())
    before, _, after = text.partition(letter)
    power, dimension = _CODE[letter]
    return Quantity(decimal(f"{before or '0'}.{after or '0'}", power), dimension)


def name_of(dimension: Dimension) -> str:
    """A dimension in words: "V", "A/V^2", "" for a pure number."""
    if dimension in NAMES:
        return NAMES[dimension]
    best = ""
    for base, name in (((1, 0, 0, 0), "V"), ((0, 1, 0, 0), "A"), ((0, 0, 1, 0), "s"), ((0, 0, 0, 1), "K")):
        k = dimension[base.index(1)]
        if k > 0:
            best += ("*" if best else "") + name + (f"^{k}" if k > 1 else "")
    best = best or "1"
    for base, name in (((1, 0, 0, 0), "V"), ((0, 1, 0, 0), "A"), ((0, 0, 1, 0), "s"), ((0, 0, 0, 1), "K")):
        k = -dimension[base.index(1)]
        if k > 0:
            best += f"/{name}" + (f"^{k}" if k > 1 else "")
    return best


def dimension_of(unit: str) -> Dimension:
    """The dimension of a unit text of the device tables: "V/s", "A/V^2", "degC", "1/V", ""."""
    if unit == "":
        return NUMBER
    if unit == "degC":
        return KELVIN
    text = unit.removeprefix("1")
    return unit_of(text or "")[1] if text != unit or unit[0] != "/" else unit_of(unit)[1]
