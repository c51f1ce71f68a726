"""Mistakes of formulas."""

from loopsim.language.rules.entry import Mistake, mistake

_NET = "a -- r1: 1 kohm -- gnd\n"

FORMULAS: tuple[Mistake, ...] = (
    mistake(
        "not-constant",
        "Lets, ranges, tolerances, parameters, waveforms and values of passive parts depend on no net and no current.",
        "only a source in V or A may depend on nets and currents",
        _NET + "let top = ⟦a⟧\n",
        _NET + "a -- r2: ⟦a/1 A⟧ -- gnd\n",
        _NET + "gnd -> v1: sine(amplitude = ⟦a⟧, frequency = 1 kHz) -> b\n",
        _NET + "expect values of a = ⟦2*a⟧\n",
    ),
    mistake(
        "formula-value",
        "A formula has a finite real value.",
        "a division by zero, a root of a negative number, or a number too large",
        "let gain = ⟦sqrt(-1)⟧\n",
        "let gain = ⟦(-8)^0.5⟧\n",
        "let gain = ⟦10^400⟧\n",
        "let gain = ⟦ln(0)⟧\n",
        "let none = 0\nlet gain = ⟦1/none⟧\n",
        "curve hump = polynomial(⟦1 mA/V*sqrt(-2)⟧)\n",
        _NET + "gnd -> v1: a*⟦sqrt(-1)⟧ -> b\n",
        _NET + "gnd -> v1: ⟦1e300*a*1e300⟧ -> b\n",
    ),
    mistake(
        "formula-term",
        "A controlled source is a sum of constants times voltages, currents, and `limit`, `tanh`, `atan` or a curve of such sums.",
        "allowed are sums of constants times voltages, currents, and limit, tanh, atan or a curve of such sums",
        _NET + "gnd -> v1: 1 V + ⟦a*a/1 V⟧ -> b\n",
        _NET + "gnd -> v1: 1 V*⟦exp(a/1 V)⟧ -> b\n",
        _NET + "gnd -> v1: ⟦1 V*1 V/a⟧ -> b\n",
        _NET + "gnd -> v1: ⟦min(a, 1 V)⟧ -> b\n",
        _NET + "gnd -> v1: ⟦limit(3*a, -a, 1 V)⟧ -> b\n",
    ),
    mistake(
        "division",
        "Nothing is divided by zero.",
        "set the divisor apart from zero",
        "let gain = 1/⟦0⟧\n",
        _NET + "let none = 0\ngnd -> v1: ⟦a/none⟧ -> b\n",
    ),
    mistake(
        "unknown-function",
        "Functions are sqrt ln exp abs min max tanh atan limit current, and curves.",
        "functions: sqrt ln exp abs min max tanh atan limit current",
        "let gain = ⟦sqr⟧(4)\n",
        "let gain = ⟦sin⟧(1)\n",
    ),
    mistake(
        "call",
        "A call has the arguments that it takes, written as it takes them.",
        "pins and fields by name, arguments of functions by place",
        "let gain = ⟦sqrt(4, 5)⟧\n",
        "let gain = ⟦max(1)⟧\n",
        "let gain = ⟦sqrt(x = 4)⟧\n",
        "kind clamp = diode(⟦1.1⟧)\n",
        "u1: opamp(⟦a⟧, b, c, d, gnd)\n",
        "gnd -> v1: sine(⟦1 V⟧, 1 kHz) -> a\n",
        "gnd -> v1: ⟦points()⟧ -> a\n",
        "gnd -> v1: current(⟦1 V⟧)*1 ohm -> a\n",
    ),
    mistake(
        "limit-order",
        "The lower end of `limit` lies below the upper one.",
        "limit(x, low, high)",
        _NET + "gnd -> v1: ⟦limit(3*a, 1 V, -1 V)⟧ -> b\n",
        "let gain = ⟦limit(3, 2, 1)⟧\n",
    ),
    mistake(
        "unknown-current",
        "A part whose current is read has two pins.",
        "put a part with two pins in series and read its current",
        "⟦q1⟧: bipolar_npn(collector = a, base = b, emitter = gnd)\na -- r1: 1 kohm -- gnd\nb -- r2: 1 kohm -- gnd\n"
        "gnd -> v1: current(q1)*1 ohm -> a\n",
    ),
)
