"""Damage to circuit files: what a slip of the editor, a bad merge or a broken disk makes of them. Seeded."""

import re
from collections.abc import Iterator
from pathlib import Path

import numpy as np

CIRCUITS = Path(__file__).parents[2] / "circuits"
TOKEN = re.compile(r'"[^"\n]*"|[A-Za-z_][A-Za-z0-9_.]*|[0-9.]+|->|--|\s+|.', re.DOTALL)
JUNK = ("\x00", "\u00a0", "\u2014", "\u03a9", "\u202e", "\U0001f6b0", "\ufeff", "\r", "\t", '"', "#", "((", "}", "{", "..", "1e999", "_",
        "9" * 450, "(" * 300, "-" * 300, "degC", "expect", "\u0661", "%", "^", "+/-")  # fmt: skip


def sources() -> dict[str, str]:
    """Every shipped text, by its path below the library root."""
    return {path.relative_to(CIRCUITS).as_posix(): path.read_text(encoding="utf-8") for path in sorted(CIRCUITS.rglob("*.loop"))}


def damaged(text: str, rng: np.random.Generator) -> str:
    """One text with one to three pieces of damage."""
    for _ in range(int(rng.integers(1, 4))):
        kind = DAMAGE[int(rng.integers(len(DAMAGE)))]
        text = kind(text, rng)
    return text


def _tokens(text: str, rng: np.random.Generator) -> tuple[list[str], int, int]:
    tokens = TOKEN.findall(text) or [" "]
    first, second = (int(k) for k in rng.integers(len(tokens), size=2))
    return tokens, first, second


def _delete_token(text: str, rng: np.random.Generator) -> str:
    tokens, k, _ = _tokens(text, rng)
    return "".join(tokens[:k] + tokens[k + 1 :])


def _double_token(text: str, rng: np.random.Generator) -> str:
    tokens, k, _ = _tokens(text, rng)
    return "".join(tokens[: k + 1] + tokens[k:])


def _swap_tokens(text: str, rng: np.random.Generator) -> str:
    tokens, j, k = _tokens(text, rng)
    tokens[j], tokens[k] = tokens[k], tokens[j]
    return "".join(tokens)


def _insert_token(text: str, rng: np.random.Generator) -> str:
    tokens, j, k = _tokens(text, rng)
    return "".join([*tokens[:j], tokens[k], *tokens[j:]])


def _replace_token(text: str, rng: np.random.Generator) -> str:
    tokens, j, k = _tokens(text, rng)
    tokens[j] = tokens[k]
    return "".join(tokens)


def _delete_character(text: str, rng: np.random.Generator) -> str:
    k = int(rng.integers(len(text) + 1))
    return text[:k] + text[k + 1 :]


def _insert_junk(text: str, rng: np.random.Generator) -> str:
    k = int(rng.integers(len(text) + 1))
    return text[:k] + JUNK[int(rng.integers(len(JUNK)))] + text[k:]


def _cut_short(text: str, rng: np.random.Generator) -> str:
    return text[: int(rng.integers(len(text) + 1))]


def _splice_lines(text: str, rng: np.random.Generator) -> str:
    lines = text.split("\n")
    j, k = (int(n) for n in rng.integers(len(lines), size=2))
    middle = int(rng.integers(len(lines[k]) + 1))
    lines[j] = lines[j][: int(rng.integers(len(lines[j]) + 1))] + lines[k][middle:]
    return "\n".join(lines)


def _join_lines(text: str, rng: np.random.Generator) -> str:
    ends = [match.start() for match in re.finditer("\n", text)]
    if not ends:
        return text
    k = ends[int(rng.integers(len(ends)))]
    return text[:k] + " " + text[k + 1 :]


def _double_line(text: str, rng: np.random.Generator) -> str:
    lines = text.split("\n")
    k = int(rng.integers(len(lines)))
    return "\n".join([*lines[: k + 1], *lines[k:]])


DAMAGE = (_delete_token, _double_token, _swap_tokens, _insert_token, _replace_token, _delete_character, _insert_junk, _cut_short,
          _splice_lines, _join_lines, _double_line)  # fmt: skip


def mutants(seed: int, each: int) -> Iterator[tuple[str, str]]:
    """(path, damaged text): so many of each shipped text."""
    rng = np.random.default_rng(seed)
    for name, text in sources().items():
        for _ in range(each):
            yield name, damaged(text, rng)
