"""Baselines: what moved, appeared or vanished since a stored run."""

from dataclasses import replace
from pathlib import Path

import pytest

from loopsim.requirements.baseline import (
    SHARE,
    BaselineError,
    baseline_text,
    compare,
    entries,
    read_baseline,
    seen_from,
    within_scope,
)
from loopsim.requirements.outcomes import RequirementOutcome

HELD = RequirementOutcome(
    "c", "half", "expect half: values of x = 2.5 V", "met", (2.5,), ((2.4, 2.6),), 0.1, file="lib/c.loop", line=3, proof="proved"
)  # fmt: skip
OTHER = replace(HELD, label="other", file="lib/d.loop", circuit="d")


@pytest.fixture
def stored(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> str:
    monkeypatch.chdir(tmp_path)
    path = tmp_path / "base.json"
    path.write_text(baseline_text(entries([OTHER, HELD], str(path))), encoding="utf-8")
    return str(path)


def changes(stored: str, *now: RequirementOutcome) -> list[tuple[str, str, str]]:
    old = read_baseline(stored)
    met = entries(now, stored)
    gone = [place for place in within_scope(old, stored, ["lib"], ()) if place not in met]
    return [(change.kind, change.file, change.label) for change in compare(old, now, stored, gone)]


def test_an_equal_run_is_as_the_baseline_has_it(stored: str) -> None:
    assert changes(stored, HELD, OTHER) == []
    assert changes(stored, OTHER, replace(HELD, seconds=3.0, margin=0.2, line=9, note="n")) == []  # told by nothing that matters


@pytest.mark.parametrize(
    "change",
    [
        {"outcome": "violated"},
        {"measured": (2.5 * (1.0 + 3.0 * SHARE),)},
        {"measured": (2.5, 2.5)},
        {"measured": ()},
        {"text": "expect half: values of x = 2.4 V"},
        {"proof": "by corners"},
    ],
)
def test_what_differs_has_moved(stored: str, change: dict[str, object]) -> None:
    assert changes(stored, OTHER, replace(HELD, **change)) == [("moved", "lib/c.loop", "half")]


def test_the_last_digits_are_no_move(stored: str) -> None:
    assert changes(stored, OTHER, replace(HELD, measured=(2.5 * (1.0 + 0.5 * SHARE),))) == []
    # near zero the limits give the scale: rounding of the arithmetic is not a move
    zero = replace(HELD, measured=(1e-17,), limits=((0.0, 0.1),))
    old = entries([zero], stored)
    assert compare(old, [replace(zero, measured=(-3e-16,))], stored, []) == ()
    assert len(compare(old, [replace(zero, measured=(1e-3,))], stored, [])) == 1


def test_new_ones_appear_and_missing_ones_vanish(stored: str) -> None:
    assert changes(stored, HELD, replace(OTHER, label="new")) == [("appeared", "lib/d.loop", "new"), ("vanished", "lib/d.loop", "other")]


def test_only_what_the_run_looked_at_can_vanish(stored: str) -> None:
    old = read_baseline(stored)
    assert within_scope(old, stored, ["lib/c.loop"], ()) == [("lib/c.loop", "half")]
    assert within_scope(old, stored, ["lib/c"], ()) == []
    assert len(within_scope(old, stored, ["."], ())) == 2
    assert within_scope(old, stored, ["lib"], ["other"]) == [("lib/d.loop", "other")]
    assert within_scope(old, stored, ["lib"], ["c"]) == [("lib/c.loop", "half")]


def test_a_baseline_does_not_depend_on_the_folder_where_the_command_is_started(
    stored: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "lib").mkdir()
    monkeypatch.chdir(tmp_path / "lib")
    assert seen_from("../base.json", "c.loop") == seen_from(stored, str(tmp_path / "lib" / "c.loop")) == "lib/c.loop"


def test_a_baseline_is_the_same_text_whatever_the_order_of_the_run(stored: str) -> None:
    assert baseline_text(entries([HELD, OTHER], stored)) == Path(stored).read_text(encoding="utf-8")
    assert len(Path(stored).read_text(encoding="utf-8").splitlines()) == 2 + 2  # one requirement a line


@pytest.mark.parametrize(
    ("content", "said"),
    [
        (None, "there is no baseline"),
        ("", "is no baseline"),
        ("{}", "is no baseline"),
        ("[1]", "is no baseline"),
        ("[" * 10_000, "is no baseline"),
        ('{"form": "loopsim baseline 9", "requirements": []}', "another form"),
        ('{"form": "loopsim baseline 1", "requirements": [{"file": "f", "label": "l"}]}', "is no baseline"),
        ('{"form": "loopsim baseline 1", "requirements": [{"file": 1, "label": 2, "text": "", "outcome": "fine", "measured": 1}]}', "is"),
    ],
)
def test_what_is_no_baseline_is_told(tmp_path: Path, content: str | None, said: str) -> None:
    path = tmp_path / "b.json"
    if content is not None:
        path.write_text(content, encoding="utf-8")
    with pytest.raises(BaselineError, match=said):
        read_baseline(str(path))
    with pytest.raises(BaselineError, match="cannot be read"):
        read_baseline(str(tmp_path))
