"""Write the parts of docs/ that are made from tables: python tests/write_pages.py"""

from pathlib import Path

import write_circuits
import write_errors

from loopsim.cli.catalogue import COMMON, VERBS
from loopsim.cli.guide import reference

END = "<!-- end of verbs -->"


def with_verbs(page: str) -> str:
    """The page of the command with its section of verbs made anew."""
    head, _, rest = page.partition("-->\n")
    return f"{head}-->\n{reference(VERBS, COMMON)}\n{END}{rest.partition(END)[2]}"


if __name__ == "__main__":
    path = Path(__file__).parent.parent / "docs/reference/cli.md"
    path.write_text(with_verbs(path.read_text(encoding="utf-8")), encoding="utf-8")
    write_circuits.PAGE.write_text(write_circuits.page(), encoding="utf-8")
    write_errors.PAGE.write_text(write_errors.page(), encoding="utf-8")
