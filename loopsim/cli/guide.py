"""Help texts, made from the table of verbs: examples first."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from loopsim.cli.exits import MEANINGS
from loopsim.cli.options import Option, Verb


def _columns(rows: Sequence[tuple[str, str]]) -> list[str]:
    width = max(len(left) for left, _ in rows)
    return [f"    {left.ljust(width)}   {right}" for left, right in rows]


def _examples(examples: Sequence[tuple[str, str]]) -> list[str]:
    return [line for command, what in examples for line in (f"    {command}", f"        {what}")]


def _option_rows(options: Sequence[Option]) -> list[tuple[str, str]]:
    return [(f"{option.name} {option.value}".rstrip(), option.help) for option in options]


def overview(verbs: Mapping[str, Verb], common: Sequence[Option]) -> str:
    """What `loopsim --help` prints."""
    firsts = [(verb.examples[0][0], verb.summary) for verb in verbs.values()][:3]
    always = [
        *_option_rows(common),
        ("--version", "the version of loopsim and of the libraries under it"),
        ("-h, --help", "help, anywhere: `loopsim states -h` tells the options of a verb"),
    ]
    return "\n".join(
        [
            "loopsim: every operating point of a circuit with feedback, proved and judged",
            "",
            *_examples(firsts),
            "",
            "verbs",
            *_columns([(f"{verb.name} {verb.takes}", verb.summary) for verb in verbs.values()]),
            "",
            "always",
            *_columns(always),
            "",
            "exit codes",
            *_columns([(str(int(code)), meaning) for code, meaning in MEANINGS.items()]),
            "",
            "Answers go to standard output, everything else to standard error. NO_COLOR is obeyed.",
            "",
        ]
    )


def verb_help(verb: Verb, common: Sequence[Option]) -> str:
    """What `loopsim VERB -h` prints."""
    rows = [*_option_rows((*verb.options, *common)), ("-h, --help", "this text")]
    return "\n".join(
        [
            f"loopsim {verb.name} {verb.takes}: {verb.summary}",
            "",
            *_examples(verb.examples),
            "",
            "options",
            *_columns(rows),
            *(["", verb.notes] if verb.notes else []),
            "",
        ]
    )


def reference(verbs: Mapping[str, Verb], common: Sequence[Option]) -> str:
    """The verbs as a section of docs/reference/cli.md."""
    lines: list[str] = []
    for verb in verbs.values():
        lines += [f"## {verb.name} {verb.takes}", "", f"{verb.summary[0].upper()}{verb.summary[1:]}.", ""]
        lines += ["| example | does |", "| --- | --- |"]
        lines += [f"| `{command}` | {what} |" for command, what in verb.examples]
        if verb.options:
            lines += ["", "| option | does |", "| --- | --- |"]
            lines += [f"| `{left}` | {right} |" for left, right in _option_rows(verb.options)]
        lines += ["", *([verb.notes, ""] if verb.notes else [])]
    lines += ["## Every verb", "", "| option | does |", "| --- | --- |"]
    lines += [f"| `{left}` | {right} |" for left, right in _option_rows(common)]
    return "\n".join(lines) + "\n"
