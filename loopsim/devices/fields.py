"""What a device's fields are: unit, range, default and help, kept as metadata of its dataclass and read back as `FieldSpec`s."""

from __future__ import annotations

import dataclasses
from dataclasses import MISSING, dataclass
from typing import Any, TypeAlias

Scalar: TypeAlias = Any  # a float, or an array of shape (batch,)


@dataclass(frozen=True, slots=True)
class FieldSpec:
    """One field of a device or of a waveform, as the language and the reference page see it.

    name: as written; unit: of its value in SI ("" for a pure number, "signal" for the unit of the source a waveform drives).
    default: None where absent unless given. low, high: allowed values, both ends included, None for what is no number.
    words: the allowed words, empty for what is no word. required: it has no default and no circuit works without it.
    form: "number"; "source" (a number or a waveform); "word"; "net" (the name of a net); "curve"; "formula" (of net voltages).
    """

    name: str
    unit: str
    default: float | str | None
    low: float | None
    high: float | None
    words: tuple[str, ...]
    help: str
    required: bool = False
    form: str = "number"


def quantity(
    unit: str, low: float, high: float, text: str, default: float | None = None, form: str = "number"
) -> Any:
    """A number [unit] between low and high; without a default its effect is absent, exactly."""
    return dataclasses.field(
        default=default, metadata={"unit": unit, "low": low, "high": high, "help": text, "form": form}
    )


def needed(unit: str, low: float, high: float, text: str, form: str = "number") -> Any:
    """A number [unit] without which the device means nothing."""
    return dataclasses.field(metadata={"unit": unit, "low": low, "high": high, "help": text, "form": form})


def word(words: tuple[str, ...], text: str) -> Any:
    """One of some words; the first is the default."""
    return dataclasses.field(default=words[0], metadata={"words": words, "help": text, "form": "word"})


def named(form: str, text: str, unit: str = "") -> Any:
    """A net, a curve or a formula; a net may be absent."""
    metadata = {"help": text, "form": form, "unit": unit}
    if form == "net":
        return dataclasses.field(default=None, metadata=metadata)
    return dataclasses.field(metadata=metadata)


def specs_of(described: type) -> dict[str, FieldSpec]:
    """Every described field of a dataclass, in order. A trailing underscore (of a Python keyword) is no part of the name."""
    found = {}
    for entry in dataclasses.fields(described):
        data = entry.metadata
        if "help" not in data:
            continue
        required = entry.default is MISSING
        name = entry.name.rstrip("_")
        found[name] = FieldSpec(
            name,
            data.get("unit", ""),
            None if entry.default is MISSING else entry.default,
            data.get("low"),
            data.get("high"),
            data.get("words", ()),
            data["help"],
            required,
            data["form"],
        )
    return found
