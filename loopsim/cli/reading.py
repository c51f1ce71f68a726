"""From a path and `--set` words to a circuit and SI values, with a clear word for everything that is no circuit file."""

from __future__ import annotations

import contextlib
import difflib
import os
import re
from collections.abc import Sequence
from typing import TYPE_CHECKING

from loopsim.cli.options import nearest
from loopsim.errors import CircuitError, LoopsimError, Span
from loopsim.printable import printable

if TYPE_CHECKING:
    from loopsim.circuit import Circuit, Parameter

_QUANTITY = re.compile(r"([0-9.]+(?:[eE][+-]?[0-9]+)?)\s*(\S*)")
LARGEST_SNIFF = 65536  # bytes looked at for a NUL; a circuit file that long without one is text


def readable(path: str) -> None:
    """Raise CircuitError unless `path` is a text file that holds something."""
    place = Span(path, 1, 1, 1)
    if os.path.isdir(path):
        raise CircuitError("is-a-folder", f"`{path}` is a folder, not a circuit file", hint=_inside(path))
    if not os.path.exists(path):
        raise CircuitError("missing-file", f"there is no file `{path}`", hint=_similar(path))
    try:
        with open(path, "rb") as stream:
            head = stream.read(LARGEST_SNIFF)
    except OSError as error:
        raise CircuitError("cannot-read", f"`{path}` cannot be read: {error.strerror}") from None
    if b"\x00" in head:
        raise CircuitError("not-text", "this is not text: it holds a zero byte", place, "a circuit file is UTF-8 text")
    if not head.strip():
        raise CircuitError("empty-file", "the file is empty", place, 'begin with: circuit NAME "title"')


def _inside(folder: str) -> str:
    try:
        found = sorted(name for name in os.listdir(folder) if name.endswith(".loop"))
    except OSError:
        found = []
    return f"name a file in it, such as `{os.path.join(folder, found[0])}`" if found else "name a file whose name ends in .loop"


def _similar(path: str) -> str:
    folder, name = os.path.split(path)
    try:
        here = [entry for entry in os.listdir(folder or ".") if entry.endswith(".loop")]
    except OSError:
        return f"there is no folder `{folder}` either"
    found = difflib.get_close_matches(name, here, n=1, cutoff=0.6)
    return f"did you mean `{os.path.join(folder, found[0])}`?" if found else ""


def read_circuit(path: str) -> Circuit:
    """The circuit in a file."""
    readable(path)
    from loopsim.language.load import load

    return load(path)


def settings(circuit: Circuit, pairs: Sequence[tuple[str, str]]) -> dict[str, float]:
    """The values of `--set` words [SI; degC for `ambient`]; CircuitError for an unknown let or a value that it cannot have."""
    found: dict[str, float] = {}
    for name, text in pairs:
        parameter = circuit.parameters.get(name)
        if parameter is None:
            raise unknown_let(circuit, name)
        found[name] = let_value(text, parameter, f"--set {name}=")
    return found


def unknown_let(circuit: Circuit, name: str) -> CircuitError:
    """The mistake of naming a let that the circuit has not, with the nearest one or all of them."""
    lets = [known for known in circuit.parameters if "." not in known]
    hint = nearest(name, circuit.parameters) or f"its lets: {', '.join(lets)}"
    return CircuitError("unknown-let", f"{circuit.name} has no let `{name}`", hint=hint)


def let_value(text: str, parameter: Parameter, option: str) -> float:
    """A value as the language reads it (4.5V, 4K7, 60degC) for a let [SI; degC for a temperature]; a bare number is in the
    unit of the let. option: what stands before the text on the command line, for messages."""
    from loopsim.units import CODE_PATTERN, NUMBER, code, dimension_of, name_of, quantity

    said = f"{option}{text}"
    body = text.strip().lstrip("+-").strip()
    sign = -1.0 if text.strip().startswith("-") else 1.0
    try:
        found = code(body) if re.fullmatch(CODE_PATTERN, body) else quantity(*_split(body))
        wanted = dimension_of(parameter.unit)
    except ValueError as reason:
        raise CircuitError("wrong-value", f"{said}: {reason}") from None
    bare = not found.scale and found.dimension == NUMBER and body[-1] in "0123456789."
    if found.dimension != wanted and not bare:
        own, other = name_of(wanted) or "a pure number", name_of(found.dimension) or "a pure number"
        raise CircuitError("wrong-value", f"{said}: `{parameter.name}` is in {own}, and this is in {other}")
    if parameter.unit == "degC" and found.scale != "degC" and not bare:
        raise CircuitError("wrong-value", f"{said}: a temperature is set in degC")
    return sign * found.value


def _split(text: str) -> tuple[str, str]:
    """Number and unit; ValueError for anything else."""
    match = _QUANTITY.fullmatch(text)
    if match is None:
        raise ValueError("not a quantity: write it as 4.5V, 4K7 or 60degC")
    return match[1], match[2]


def write_file(path: str, text: str) -> tuple[str, ...]:
    """Write an answer's file whole or not at all; the remark to make. A link stays one, and so does a device."""
    target = os.path.realpath(path)
    temporary = f"{target}.{os.getpid()}.part"
    if os.path.exists(target) and not os.path.isfile(target):
        temporary = target
    try:
        with open(temporary, "w", encoding="utf-8", newline="") as stream:
            stream.write(text)
        if temporary != target:
            os.replace(temporary, target)
    except OSError as error:
        if temporary != target:
            with contextlib.suppress(OSError):
                os.remove(temporary)
        raise LoopsimError(f"cannot write `{path}`: {error.strerror}") from None
    return (f"wrote {printable(path)}",)
