"""Small circuits that are cheap to judge: what is around the analyses is tested with them."""

from pathlib import Path


def circuit_text(name: str, supply: float = 5.0) -> str:
    """A divider by two with two requirements; it holds them at 5 V."""
    return (
        f'circuit {name} "divider"\nlet supply = {supply} V\ngnd -> battery: supply -> top\n'
        "top -- upper: 1 kohm -- middle -- lower: 1 kohm -- gnd\n"
        "expect states = 1\nexpect half: values of middle = 2.5 V +/- 10 mV\n"
    )


def write_library(folder: Path, count: int, off: int = 2) -> None:
    """`count` dividers, d0, d1, ..., in two folders; the one with number `off` is off by a volt."""
    (folder / "b").mkdir(parents=True)
    for number in range(count):
        place = folder / ("b" if number % 2 else ".")
        (place / f"d{number}.loop").write_text(circuit_text(f"d{number}", 7 if number == off else 5), encoding="utf-8")
