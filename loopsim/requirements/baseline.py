"""A stored run to compare with: which requirements moved, appeared or vanished since.

A requirement is known by its file (as seen from the folder of the baseline, so that it does not matter where
the command is started) and its label.
"""

from __future__ import annotations

import json
import math
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from loopsim.errors import LoopsimError
from loopsim.requirements.outcomes import RequirementOutcome
from loopsim.requirements.selection import named

FORM = "loopsim baseline 1"
# A value moved when it differs by more than this share of the largest of itself, its old value and its limits:
# coarser than the last digits, in which processors differ, finer than what a changed resistor does.
SHARE = 1e-4

Place = tuple[str, str]  # (file, label)
Entry = dict[str, Any]


class BaselineError(LoopsimError):
    """The file is no baseline, or cannot be read."""


@dataclass(frozen=True)
class Moved:
    """One difference. kind: moved, appeared or vanished; file, label: of the requirement; was, now: what the
    baseline and the run say of it, as text."""

    kind: str
    file: str
    label: str
    was: str = ""
    now: str = ""

    def to_dict(self) -> dict[str, Any]:
        """The JSON form."""
        return {"kind": self.kind, "file": self.file, "label": self.label, "was": self.was, "now": self.now}


def read_baseline(path: str) -> dict[Place, Entry]:
    """The entries of a baseline file. BaselineError for anything else."""
    try:
        with open(path, encoding="utf-8") as stream:
            whole = json.load(stream)
        if whole["form"] != FORM:
            raise BaselineError(f"`{path}` is a baseline of another form: renew it with --accept")
        return {(str(entry["file"]), str(entry["label"])): _checked(entry) for entry in whole["requirements"]}
    except FileNotFoundError:
        raise BaselineError(f"there is no baseline `{path}`: make it with --accept") from None
    except OSError as error:
        raise BaselineError(f"the baseline `{path}` cannot be read: {error.strerror}") from None
    except (ValueError, KeyError, TypeError, RecursionError):
        raise BaselineError(f"`{path}` is no baseline") from None


def _checked(entry: Entry) -> Entry:
    if not isinstance(entry["text"], str) or entry["outcome"] not in ("met", "violated", "undecided"):
        raise ValueError("no requirement")
    return {**entry, "measured": [float(value) for value in entry["measured"]]}


def entries(outcomes: Sequence[RequirementOutcome], path: str) -> dict[Place, Entry]:
    """What a baseline at `path` holds of the outcomes."""
    found: dict[Place, Entry] = {}
    for outcome in outcomes:
        file = seen_from(path, outcome.file or "")
        found[file, outcome.label] = {
            "file": file,
            "circuit": outcome.circuit,
            "label": outcome.label,
            "text": outcome.text,
            "outcome": outcome.outcome,
            "proof": outcome.proof,
            "measured": [value for value in outcome.measured if math.isfinite(value)],
        }
    return found


def seen_from(path: str, file: str) -> str:
    """`file` relative to the folder of the baseline, with forward slashes."""
    folder = os.path.dirname(os.path.realpath(path))
    try:
        shown = os.path.relpath(os.path.realpath(file), folder)
    except ValueError:  # another drive
        shown = os.path.realpath(file)
    return shown.replace(os.sep, "/")


def baseline_text(found: Mapping[Place, Entry]) -> str:
    """A baseline file: sorted, one requirement a line, so that version control shows what changed."""
    lines = [json.dumps(found[place], ensure_ascii=True) for place in sorted(found)]
    body = ",\n".join(f"  {line}" for line in lines)
    return f'{{"form": "{FORM}", "requirements": [\n{body}\n]}}\n'


def within_scope(old: Mapping[Place, Entry], path: str, paths: Sequence[str], select: Sequence[str]) -> list[Place]:
    """Places of a baseline that a run over `paths` with the patterns `select` meets, if they are still there."""
    roots = [seen_from(path, asked) for asked in paths]

    def below(file: str) -> bool:
        return any(root in (".", file) or file.startswith(f"{root}/") for root in roots)

    return [place for place, entry in old.items() if below(place[0]) and named(select, str(entry.get("circuit", "")), place[1])]


def compare(
    old: Mapping[Place, Entry], outcomes: Sequence[RequirementOutcome], path: str, vanished: Sequence[Place]
) -> tuple[Moved, ...]:
    """What differs, in the order of files and labels. path: of the baseline; vanished: places that the run
    should have met and did not."""
    new = entries(outcomes, path)
    limits = {(seen_from(path, o.file or ""), o.label): o.limits for o in outcomes}
    moved = [Moved("vanished", *place, was=said(old[place])) for place in vanished]
    for place, entry in new.items():
        before = old.get(place)
        if before is None:
            moved.append(Moved("appeared", *place, now=said(entry)))
        elif _differs(before, entry, limits[place]):
            moved.append(Moved("moved", *place, was=said(before), now=said(entry)))
    return tuple(sorted(moved, key=lambda change: (change.file, change.label)))


def _differs(old: Entry, new: Entry, limits: Sequence[tuple[float | None, float | None]]) -> bool:
    if any(old.get(name) != new[name] for name in ("outcome", "text", "proof")):
        return True
    before, after = old["measured"], new["measured"]
    if len(before) != len(after):
        return True
    ends = max((abs(end) for pair in limits for end in pair if end is not None), default=0.0)
    return any(abs(b - a) > SHARE * max(abs(a), abs(b), ends) for a, b in zip(after, before, strict=True))


def said(entry: Entry) -> str:
    """An entry in one line: `met, 4.98, expect values of lid = 5 V +/- 1 %`."""
    values = ", ".join(f"{value:.6g}" for value in entry["measured"])
    by = f" ({entry['proof']})" if entry.get("proof") else ""
    return ", ".join(part for part in (entry["outcome"] + by, values, entry["text"]) if part)
