"""Mistakes of a file as a whole, and of the files that it uses."""

from loopsim.language.rules.entry import Example, Mistake, mistake

_CELL = "block cell(p) {\n  p -- r1: 1 kohm -- gnd\n}\n"

FILES: tuple[Mistake, ...] = (
    mistake(
        "no-circuit",
        "The first statement of a circuit file is `circuit NAME`.",
        "a file without it holds parts for `use`",
        Example("⟦gnd⟧ -> battery: 9 V -> vcc\n", headless=True),
        Example("let ⟦top⟧ = 9 V\ncircuit example\n", headless=True),
    ),
    mistake("second-circuit", "A file holds one circuit.", "one circuit per file", "circuit ⟦other⟧\n"),
    mistake(
        "parts-file",
        "A file that is used holds only `use`, `kind`, `curve` and `block`.",
        "keep lets and parts in the circuit file, or put them into a block",
        Example('use "parts.loop"\n', files={"parts.loop": "let top = 9 V\n"}),
        Example('use "parts.loop"\n', files={"parts.loop": "circuit other\n"}),
    ),
    mistake(
        "use-path",
        "`use` takes a path relative to the file, with forward slashes.",
        "forward slashes, below the library root",
        'use ⟦"/etc/parts.loop"⟧\n',
        'use ⟦"C:\\parts.loop"⟧\n',
        'use ⟦""⟧\n',
    ),
    mistake(
        "use-outside",
        "`use` stays inside the library root.",
        "move the parts file into the library",
        'use ⟦"../../parts.loop"⟧\n',
        'use ⟦"."⟧\n',
    ),
    mistake(
        "use-missing",
        "The file that `use` names is there.",
        "the path is relative to this file",
        Example('use ⟦"part.loop"⟧\n', files={"parts.loop": _CELL}),
        'use ⟦"parts/cells.loop"⟧\n',
    ),
    mistake(
        "use-cycle",
        "Files do not use each other in a circle.",
        "put what both need into a third file",
        Example('use "one.loop"\n', files={"one.loop": 'use "two.loop"\n', "two.loop": 'use "one.loop"\n'}),
        Example('use ⟦"example.loop"⟧\n'),
    ),
    mistake(
        "too-many-files",
        "A circuit uses at most 200 files, which use each other at most 32 deep.",
        "join parts files that belong together",
        Example(
            "".join(f'use "{k}.loop"\n' for k in range(200)) + 'use ⟦"200.loop"⟧\n',
            files={f"{k}.loop": f"kind k{k} = diode()\n" for k in range(201)},
        ),
        Example('use "0.loop"\n', files={f"{k}.loop": f'use "{k + 1}.loop"\n' for k in range(34)}),
    ),
)
