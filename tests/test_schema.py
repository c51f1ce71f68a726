"""Real documents against the JSON Schemas in docs/reference/schema."""

import json
from pathlib import Path
from typing import Any

import jsonschema
import pytest

from loopsim.cli import main
from loopsim.cli.catalogue import VERBS

ROOT = Path(__file__).parent.parent
SCHEMAS = ROOT / "docs/reference/schema"
JSON_VERBS = sorted(name for name, verb in VERBS.items() if any(option.name == "--json" for option in verb.options))


def schema(verb: str) -> dict[str, Any]:
    return json.loads((SCHEMAS / f"{verb}.json").read_text(encoding="utf-8"))


def answer(words: list[str], capsys: pytest.CaptureFixture[str]) -> dict[str, Any]:
    """What the command prints with --json, NaN and Infinity refused."""
    capsys.readouterr()
    main([*words, "--json"])

    def refuse(word: str) -> None:
        raise AssertionError(f"{word} in JSON")

    return json.loads(capsys.readouterr().out, parse_constant=refuse)


@pytest.mark.parametrize("verb", JSON_VERBS)
def test_every_verb_that_speaks_json_has_a_schema_of_its_own(verb: str) -> None:
    found = schema(verb)
    jsonschema.Draft202012Validator.check_schema(found)
    assert found["properties"]["verb"] == {"const": verb}
    assert found["additionalProperties"] is False


def test_no_schema_is_left_without_a_verb() -> None:
    assert sorted(path.stem for path in SCHEMAS.glob("*.json")) == JSON_VERBS


CIRCUITS = sorted(path for path in (ROOT / "circuits").rglob("*.loop") if path.parent.name != "parts")


@pytest.mark.parametrize("path", CIRCUITS, ids=lambda path: path.stem)
def test_states_and_inspect_of_every_circuit_answer_by_their_schema(path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    for verb in ("states", "inspect"):
        document = answer([verb, str(path), "--budget", "5"] if verb == "states" else [verb, str(path)], capsys)
        jsonschema.validate(document, schema(verb), cls=jsonschema.Draft202012Validator)
        assert document["file"] == str(path)


def test_transient_and_cycle_answer_by_their_schema(capsys: pytest.CaptureFixture[str]) -> None:
    runs = (
        ["transient", "circuits/comparators/cistern_pump.loop", "--for", "5us"],
        ["cycle", "circuits/oscillators/cistern_blinker.loop"],
        ["cycle", "circuits/comparators/cistern_pump.loop"],  # comes to rest
    )
    for words in runs:
        document = answer([words[0], str(ROOT / words[1]), *words[2:]], capsys)
        jsonschema.validate(document, schema(words[0]), cls=jsonschema.Draft202012Validator)
    assert document["verdict"] == "no cycle"


def test_trace_answers_by_its_schema(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    bench = tmp_path / "bench.csv"
    bench.write_text("4.5, 0.02\n", encoding="utf-8")
    words = ["trace", str(ROOT / "circuits/comparators/cistern_pump.loop"), "--along", "level", "--over", "4V..6V", "--stations", "1"]
    document = answer([*words, "--overlay", str(bench)], capsys)
    jsonschema.validate(document, schema("trace"), cls=jsonschema.Draft202012Validator)
    assert len(document["folds"]) == 1 and document["overlay"]["points"] == 1


def test_a_schema_refuses_what_it_should(capsys: pytest.CaptureFixture[str]) -> None:
    document = answer(["states", str(ROOT / "circuits/comparators/cistern_pump.loop")], capsys)
    found = schema("states")
    for change in (
        {"extra": 1},
        {"schema": "loopsim/2"},
        {"verb": "inspect"},
        {"complete": "yes"},
        {"undecided": -1},
        {"complete": True, "undecided": 1},
        {"states": [{**document["states"][0], "stable": "maybe"}]},
        {"states": [{**document["states"][0], "nets": {"out": None}}]},
    ):
        with pytest.raises(jsonschema.ValidationError):
            jsonschema.validate({**document, **change}, found, cls=jsonschema.Draft202012Validator)
