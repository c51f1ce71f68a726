"""The page of the shipped circuits, made from their files."""

from pathlib import Path

import loopsim

ROOT = Path(__file__).parent.parent
LIBRARY = ROOT / "circuits"
PAGE = ROOT / "docs/reference/circuits.md"
FAMILIES = (
    ("comparators", "Comparators and lockouts"),
    ("latches", "Latches"),
    ("memory", "Memory cells"),
    ("references", "References"),
    ("supplies", "Supplies and limiters"),
    ("oscillators", "Oscillators"),
    ("amplifiers", "Amplifiers"),
    ("switches", "Switches"),
    ("curves", "Negative-resistance curves"),
)
HEAD = """# The circuits that come with loopsim

Every file states its job, what is known about it, and its requirements; `loopsim states circuits/FAMILY/FILE.loop` shows its
operating points, and `loopsim verify circuits` judges all of them. Values are preferred ones (IEC 60063), parts are typical of
their class (common practice), and no circuit here has been built: read the [cautions](../cautions.md). This page is made from the
files: `python tests/write_pages.py`.
"""
FOOT = """
`circuits/parts/` holds the shared kinds, curves and blocks: amplifiers, semiconductors, falling curves, static cells.
"""


def job(path: Path) -> str:
    """What the header comment says before its `Known:`."""
    lines = []
    for line in path.read_text(encoding="utf-8").splitlines():
        if not line.startswith("# ") or line.startswith("# Known: "):
            break
        lines.append(line.removeprefix("# "))
    return " ".join(lines)


def row(path: Path) -> str:
    asked = "; ".join(f"`{requirement.text.removeprefix('expect ')}`" for requirement in loopsim.load(str(path)).requirements)
    return f"| `{path.relative_to(LIBRARY).as_posix()}` | {job(path)} | {asked} |"


def page() -> str:
    sections = [HEAD]
    for folder, title in FAMILIES:
        rows = [row(path) for path in sorted((LIBRARY / folder).glob("*.loop"))]
        sections.append(
            "\n".join(
                [f"\n## {title}\n", "| file | what it is for | what is asked of it |", "| --- | --- | --- |", *rows, ""]
            )
        )
    return "".join([*sections, FOOT])
