"""Mistakes of the circuit as a whole: nothing then determines its voltages and currents."""

from loopsim.language.rules.entry import Example, Mistake, mistake

_NET = "gnd -> v1: 1 V -> a\na -- r1: 1 kohm -- gnd\n"

STRUCTURE: tuple[Mistake, ...] = (
    mistake(
        "empty-circuit",
        "A circuit has a net besides `gnd`.",
        "join parts to nets beside gnd, as in: gnd -> battery: 5 V -> vcc -- r1: 1 kohm -- gnd",
        Example("⟦⟧circuit example\n", headless=True),
        "gnd -- ⟦r1⟧: 1 kohm -- gnd\n",
    ),
    mistake(
        "missing-ground",
        "Some part is joined to `gnd`.",
        "`gnd` is the reference of all voltages: join something to it",
        "a -- ⟦r1⟧: 1 kohm -- b\n",
    ),
    mistake(
        "floating-net",
        "From each net a path for direct current leads to `gnd`.",
        "give it a path for direct current, such as a large resistor to gnd",
        _NET + "b -- ⟦r2⟧: 1 kohm -- c\n",
        _NET + "a -- ⟦c1⟧: 1 nF -- b\n",
    ),
    mistake(
        "current-cut",
        "No net is joined to the rest by current sources and capacitors alone.",
        "give it a path for direct current, such as a large resistor to gnd",
        _NET + "a -> ⟦i1⟧: 1 mA -> b\nb -- c1: 1 nF -- gnd\n",
    ),
    mistake(
        "voltage-loop",
        "No loop holds voltage sources and inductors alone.",
        "put the small resistance in series that a real one has",
        "gnd -> ⟦v1⟧: 1 V -> a\ngnd -> v2: 2 V -> a\n",
        "gnd -> ⟦v1⟧: 1 V -> a\na -- l1: 1 mH -- gnd\n",
    ),
    mistake(
        "undetermined",
        "The equations determine every voltage and current.",
        "look for a source that only controls itself",
        "gnd -> v1: 1 V -> a\na -> ⟦i1⟧: current(i1) -> gnd\n",
    ),
)
