"""Write the tables of fields in docs/reference/devices.md from the devices themselves: python tests/device_tables.py"""

import re
from pathlib import Path

from loopsim.devices.catalogue import DEVICES, field_specs, waveform_specs
from loopsim.devices.fields import FieldSpec
from loopsim.output.engineering import shortest

PAGE = Path(__file__).parent.parent / "docs/reference/devices.md"
TABLE = re.compile(r"(<!-- fields of ([a-z_]+) -->\n).*?(<!-- end -->)", re.DOTALL)
HEAD = "| field | unit | default | from .. to | what it is |\n| --- | --- | --- | --- | --- |\n"


def _bound(value: float, unit: str) -> str:
    # powers of ten as they are: a prefix is of no help at the ends of a range
    return (
        f"{value:g}"
        if value == 0 or 1e-3 <= abs(value) < 1e4
        else f"{value:.0e}".replace("e+", "e").replace("e-0", "e-").replace("e0", "e")
    )


def row(spec: FieldSpec) -> str:
    """One line of a table."""
    unit = {"": "", "signal": "V or A"}.get(spec.unit, spec.unit)
    if spec.required:
        default = "must be given"
    elif spec.default is None:
        default = "absent"
    elif isinstance(spec.default, str):
        default = f"`{spec.default}`"
    else:
        default = shortest(spec.default, "" if spec.unit == "signal" else spec.unit)
    if spec.low is not None and spec.high is not None:
        limits = f"{_bound(spec.low, unit)} .. {_bound(spec.high, unit)}"
    else:
        limits = {
            "word": ", ".join(f"`{word}`" for word in spec.words),
            "net": "a net",
            "curve": "a curve",
        }.get(spec.form, "a formula")
    return f"| `{spec.name}` | {unit} | {default} | {limits} | {spec.help} |\n"


def table(name: str) -> str:
    """The table of a device or a waveform."""
    specs = field_specs(name) if name in DEVICES else waveform_specs(name)
    return HEAD + "".join(row(spec) for spec in specs.values())


def with_tables(page: str) -> str:
    """The page with every marked table made anew."""
    return TABLE.sub(lambda match: f"{match[1]}{table(match[2])}{match[3]}", page)


if __name__ == "__main__":
    PAGE.write_text(with_tables(PAGE.read_text(encoding="utf-8")), encoding="utf-8")
