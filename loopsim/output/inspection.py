"""What was read from a circuit file: its parts, nets, lets and what the structure says, as text and as plain data."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from loopsim.output.formulas import field_text, formula_text, tolerance_text, units_of, value_text
from loopsim.output.terminal import PLAIN, Palette
from loopsim.output.text import counted, table
from loopsim.printable import printable

if TYPE_CHECKING:
    from loopsim.circuit import Circuit, Part
    from loopsim.equations.structure import Finding

NETS_ON_A_LINE = 8  # parts named beside a net before the rest is counted


def inspection_text(
    circuit: Circuit,
    values: Mapping[str, float],
    unknowns: Sequence[tuple[str, str]],
    findings: Sequence[Finding],
    palette: Palette = PLAIN,
) -> str:
    """The answer of `inspect` with a line end. values: every let as used [SI]; unknowns: of the equations, empty where
    these could not be set up; findings: of the structure."""
    head = printable(circuit.name) + (f': "{printable(circuit.title)}"' if circuit.title else "")
    lets = [name for name in circuit.parameters if "." not in name]
    sizes = [
        counted(len(circuit.parts), "part"),
        counted(len(circuit.nets), "net"),
        counted(len(lets), "let"),
        counted(len(circuit.requirements), "requirement"),
        *([counted(len(unknowns), "unknown")] if unknowns else []),
    ]
    blocks = [
        [palette.strong(head), ", ".join(sizes)],
        _section(palette, [["part", "is a", "between", "with"], *(_part_row(circuit, part) for part in circuit.parts)]),
        _section(palette, [["net", "joins"], *([net, _joined(owners)] for net, owners in joints(circuit).items())]),
        _section(palette, [["let", "value", "range", "tolerance"], *(_let_row(circuit, values, name) for name in lets)]),
        [printable(requirement.text) for requirement in circuit.requirements],
        finding_lines(findings, palette),
    ]
    return "\n\n".join("\n".join(block) for block in blocks if block) + "\n"


def finding_lines(findings: Sequence[Finding], palette: Palette = PLAIN) -> list[str]:
    """One line a finding of the structure, or one that says there is none."""
    if not findings:
        return ["structure: nothing to remark"]
    return [
        f"{palette.alarm('fault' if finding.fatal else 'remark')}: {finding.code}: {printable(finding.message)}"
        for finding in findings
    ]


def joints(circuit: Circuit) -> dict[str, list[str]]:
    """Every net, gnd last, with the pins on it: `part` for what stands in a chain, `part.pin` for the others."""
    found: dict[str, list[str]] = {net: [] for net in (*circuit.nets, "gnd")}
    for part in circuit.parts:
        chained = set(part.pins) == {"from", "to"}
        for pin, net in part.pins.items():
            found.setdefault(net, []).append(part.name if chained else f"{part.name}.{pin}")
    return found


def _joined(owners: Sequence[str]) -> str:
    more = len(owners) - NETS_ON_A_LINE
    return ", ".join(owners[:NETS_ON_A_LINE]) + (f" and {more} more" if more > 0 else "")


def _section(palette: Palette, rows: Sequence[Sequence[str]]) -> list[str]:
    if len(rows) == 1:
        return []
    first, *rest = table(rows)
    return [palette.faint(first), *rest]


def _part_row(circuit: Circuit, part: Part) -> list[str]:
    units = _units(part)
    shown = {}
    for name, value in part.fields.items():
        own = circuit.parameters.get(f"{part.name}.{name}")
        if own is not None:  # a literal with a tolerance: show it where it was written
            shown[name] = f"{formula_text(own.value, own.unit)} {tolerance_text(own.tolerance, own.unit)}".rstrip()
        else:
            shown[name] = field_text(value, units.get(name, ""))
    # what stands alone needs no name: a resistor's one field is its resistance
    fields = list(shown.values()) if len(shown) == 1 else [f"{name} {text}" for name, text in shown.items()]
    if set(part.pins) == {"from", "to"}:
        between = f"{part.pins['from']} to {part.pins['to']}"
    else:
        between = ", ".join(f"{pin} {net}" for pin, net in part.pins.items())
    return [part.name, part.device.replace("_", " "), between, ", ".join(fields)]


def _units(part: Part) -> dict[str, str]:
    from loopsim.devices.catalogue import field_specs

    return units_of(field_specs(part.device))


def _let_row(circuit: Circuit, values: Mapping[str, float], name: str) -> list[str]:
    parameter = circuit.parameters[name]
    unit = parameter.unit
    spread = ""
    if parameter.low is not None and parameter.high is not None:
        spread = f"{formula_text(parameter.low, unit)} .. {formula_text(parameter.high, unit)}"
    value = value_text(values[name], unit) if name in values else formula_text(parameter.value, unit)
    return [name, value, spread, tolerance_text(parameter.tolerance, unit)]


def inspection_data(
    circuit: Circuit, unknowns: Sequence[tuple[str, str]], findings: Sequence[Finding]
) -> dict[str, Any]:
    """The JSON form, without the frame that every verb shares."""
    return {
        "title": circuit.title,
        "parts": [
            {
                "name": part.name,
                "device": part.device,
                "pins": dict(part.pins),
                "fields": {name: field_text(value, _units(part).get(name, "")) for name, value in part.fields.items()},
            }
            for part in circuit.parts
        ],
        "nets": joints(circuit),
        "unknowns": [{"kind": kind, "name": name} for kind, name in unknowns],
        "requirements": [{"label": one.label, "text": one.text} for one in circuit.requirements],
        "findings": [
            {
                "code": finding.code,
                "message": finding.message,
                "nets": list(finding.nets),
                "parts": list(finding.parts),
                "fatal": finding.fatal,
            }
            for finding in findings
        ],
    }


__all__ = ["finding_lines", "inspection_data", "inspection_text", "joints"]
