"""Reading the values of options: volts, seconds, counts, pairs. ValueError carries the reason."""

from __future__ import annotations

import math
import re

MOST_STATIONS = 1000  # each holds a whole proof; beyond, a budget is spent before the curve is followed
SCALES = {"f": -15, "p": -12, "n": -9, "u": -6, "\N{MICRO SIGN}": -6, "m": -3, "": 0, "k": 3, "M": 6, "G": 9, "T": 12}

# digits are checked here: float() would take "1_0", "inf" and digits of other scripts
_QUANTITY = re.compile(r"([+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?)\s*(\S*)")


def quantity(text: str, unit: str) -> float:
    """`text` as a number of `unit` [SI]: "1kV", "1 kV" or "1000" for unit V."""
    match = _QUANTITY.fullmatch(text.strip())
    if match is None:
        raise ValueError(f"not a number with {unit}")
    number, mark = match.groups()
    if mark and not mark.endswith(unit):
        raise ValueError(f"`{mark}` is not a number of {unit}")
    prefix = mark.removesuffix(unit) if mark else ""
    if prefix not in SCALES:
        raise ValueError(f"`{prefix}` is no prefix: {' '.join(scale for scale in SCALES if scale)}")
    value = float(f"{number}e{SCALES[prefix]}") if "e" not in number.lower() else float(number) * 10.0 ** SCALES[prefix]
    if not math.isfinite(value):
        raise ValueError("too large")
    return value


def positive_volts(text: str) -> float:
    """Volts above zero."""
    value = quantity(text, "V")
    if value <= 0.0:
        raise ValueError("has to be above 0 V")
    return value


def positive_seconds(text: str) -> float:
    """Seconds above zero."""
    value = quantity(text, "s")
    if value <= 0.0:
        raise ValueError("has to be above 0 s")
    return value


def count(text: str) -> int:
    """A whole number from 1."""
    value = whole(text)
    if value < 1:
        raise ValueError("has to be at least 1")
    return value


def whole(text: str) -> int:
    """A whole number from 0."""
    if not re.fullmatch(r"[0-9]{1,18}", text):
        raise ValueError("not a whole number")
    return int(text)


def stations(text: str) -> int:
    """A whole number from 0 to MOST_STATIONS."""
    value = whole(text)
    if value > MOST_STATIONS:
        raise ValueError(f"at most {MOST_STATIONS}: the curve between stations is followed through its folds anyway")
    return value


def setting(text: str) -> tuple[str, str]:
    """LET=VALUE as (name, value text); the value is read when the circuit is known."""
    name, equals, value = text.partition("=")
    if not equals or not name.strip() or not value.strip():
        raise ValueError("write it as LET=VALUE, for example level=4.5V")
    return name.strip(), value.strip()


def span(text: str) -> tuple[str, str]:
    """LO..HI as two value texts."""
    low, dots, high = text.partition("..")
    if not dots or not low.strip() or not high.strip():
        raise ValueError("write it as LO..HI, for example 0V..9V")
    return low.strip(), high.strip()


def names(text: str) -> tuple[str, ...]:
    """NET,NET,... as names."""
    found = tuple(name.strip() for name in text.split(","))
    if not all(found):
        raise ValueError("an empty name")
    return found


def report(text: str) -> str:
    """A file name for an answer: never that of a circuit."""
    if text.lower().endswith(".loop"):
        raise ValueError("a circuit file would be overwritten")
    return text


def picture(text: str) -> str:
    """A file name whose suffix says which kind of picture."""
    if not text.lower().endswith((".svg", ".png", ".pdf")):
        raise ValueError("the suffix decides the kind of picture: svg, png or pdf")
    return text


def start(text: str) -> str | dict[str, float]:
    """`off`, the letter of a state, or net=volts,net=volts,... as a mapping."""
    if "=" not in text:
        return text.strip()
    found: dict[str, float] = {}
    for item in text.split(","):
        net, equals, value = item.partition("=")
        if not equals or not net.strip():
            raise ValueError(f"`{item}`: write it as off, a letter, or net=volts,net=volts")
        found[net.strip()] = quantity(value, "V")
    return found


def volts(text: str) -> float:
    """Volts of either sign."""
    return quantity(text, "V")


def share(text: str) -> float:
    """A pure number above zero and below one."""
    value = quantity(text, "")
    if not 0.0 < value < 1.0:
        raise ValueError("has to lie between 0 and 1")
    return value
