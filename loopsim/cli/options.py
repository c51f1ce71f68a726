"""The command line as data: what a verb takes, and the parser that reads words by that table.

Nothing here imports NumPy, so that help and mistakes answer at once.
"""

from __future__ import annotations

import difflib
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from loopsim.errors import LoopsimError
from loopsim.printable import printable


class UsageError(LoopsimError):
    """A mistake in the command line. hint: the way out; verb: whose help to name."""

    def __init__(self, message: str, hint: str = "", verb: str = "") -> None:
        self.message = message
        self.hint = hint
        self.verb = verb
        super().__init__(message)

    def __str__(self) -> str:
        more = f"loopsim {self.verb} -h" if self.verb else "loopsim -h"
        hint = f"\n    {printable(self.hint)}" if self.hint else ""
        return f"loopsim: {printable(self.message)}{hint}\n    `{more}` shows what can be said"


def as_written(text: str) -> Any:
    """A value that needs no reading."""
    return text


@dataclass(frozen=True, slots=True)
class Option:
    """One option. name: with its dashes; value: the placeholder in help, empty for a switch; help: one line;
    read: text to value, raising ValueError with the reason; repeatable: its values become a tuple."""

    name: str
    value: str
    help: str
    read: Callable[[str], Any] = as_written
    repeatable: bool = False

    @property
    def key(self) -> str:
        """Its name in a request: no_color for --no-color."""
        return self.name.removeprefix("--").replace("-", "_")


@dataclass(frozen=True, slots=True)
class Verb:
    """One verb. takes: "FILE" (exactly one) or "PATH..." (one or more); summary: one line; examples: (command, what it does);
    options: beside the common ones; handler: "module:function", imported only when the verb runs."""

    name: str
    takes: str
    summary: str
    examples: tuple[tuple[str, str], ...]
    options: tuple[Option, ...]
    handler: str
    notes: str = ""


@dataclass(frozen=True)
class Request:
    """A command line that was understood. paths: what the verb works on; values: option key to value, only those given."""

    verb: str
    paths: tuple[str, ...]
    values: Mapping[str, Any] = field(default_factory=dict)

    def get(self, key: str, default: Any = None) -> Any:
        """The value of an option, or `default` where it was not given."""
        return self.values.get(key, default)

    def has(self, key: str) -> bool:
        """Whether a switch or option was given."""
        return key in self.values


def nearest(word: str, known: Iterable[str]) -> str:
    """A hint with the nearest known name, or an empty text."""
    found = difflib.get_close_matches(word, list(known), n=1, cutoff=0.6)
    return f"did you mean `{found[0]}`?" if found else ""


def parse_words(verb: Verb, words: Sequence[str], common: Sequence[Option] = ()) -> Request:
    """Read the words behind a verb. Options may stand anywhere, `--name=value` or `--name value`; `--` ends them."""
    known = {option.name: option for option in (*verb.options, *common)}
    values: dict[str, Any] = {}
    paths: list[str] = []
    rest = list(words)
    while rest:
        word = rest.pop(0)
        if word == "--":
            paths += rest
            break
        if not word.startswith("-") or word == "-":
            paths.append(word)
            continue
        name, equals, attached = word.partition("=")
        option = known.get(name)
        if option is None:
            raise UsageError(f"{verb.name} has no option {name}", nearest(name, known), verb.name)
        _store(values, option, verb, attached if equals else None, rest)
    return Request(verb.name, _checked(verb, paths), values)


def _store(values: dict[str, Any], option: Option, verb: Verb, attached: str | None, rest: list[str]) -> None:
    if not option.value:
        if attached is not None:
            raise UsageError(f"{option.name} takes no value", verb=verb.name)
        values[option.key] = True
        return
    if attached is None:
        # a following option is a forgotten value; a negative number is a value
        if not rest or (rest[0].startswith("--") and rest[0] != "--"):
            raise UsageError(f"{option.name} needs a value: {option.name} {option.value}", verb=verb.name)
        attached = rest.pop(0)
    try:
        value = option.read(attached)
    except ValueError as reason:
        raise UsageError(f"{option.name} {attached}: {reason}", verb=verb.name) from None
    if option.repeatable:
        values[option.key] = (*values.get(option.key, ()), value)
    elif option.key in values:
        raise UsageError(f"{option.name} is given twice", verb=verb.name)
    else:
        values[option.key] = value


def _checked(verb: Verb, paths: list[str]) -> tuple[str, ...]:
    if not paths:
        what = "a circuit file" if verb.takes == "FILE" else "a circuit file or a folder"
        raise UsageError(f"{verb.name} needs {what}", f"loopsim {verb.name} {verb.examples[0][0].split()[2]}", verb.name)
    if verb.takes == "FILE" and len(paths) > 1:
        raise UsageError(f"{verb.name} takes one file, got {len(paths)}: {', '.join(paths)}", verb=verb.name)
    return tuple(paths)
