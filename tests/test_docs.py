"""Every example in README and docs runs, and says what it is said to say.

Fenced blocks of a page run in order, in a folder of their own that holds a copy of `circuits`:
`loop` beginning with `# file: NAME` is written to that file, and any other that has a `circuit` statement is read;
`console` runs each line after `$ ` and compares what follows it with the output;
`python` runs in one name space a page and, where a `text` block follows, compares what it printed.
Times and numbers of boxes vary between machines and are not compared.
"""

import contextlib
import io
import re
import shlex
import shutil
from pathlib import Path

import pytest
from write_pages import with_verbs

from loopsim.cli import main
from loopsim.cli.catalogue import COMMON, VERBS

ROOT = Path(__file__).parent.parent
PAGES = sorted(path for path in (ROOT / "README.md", ROOT / "DEVELOPERS.md", *(ROOT / "docs").rglob("*.md")))
FENCE = re.compile(r"^```([a-z]*)\n(.*?)^```$", re.MULTILINE | re.DOTALL)
LINK = re.compile(r"\[[^\]]*\]\(([^)\s]+)\)")
VARYING = [
    (re.compile(r"\b\d[\d.]* (?:ns|us|ms|s)(?=[,)\n]|$)"), "TIME"),
    (re.compile(r"\b\d+ boxe?s?\b"), "BOXES"),
    (re.compile(r"\b\d+ steps, \d+ taken back"), "STEPS"),
    (re.compile(r'"(boxes|seconds)": [\d.e+-]+'), r'"\1": COST'),
]


def names(path: Path) -> str:
    return str(path.relative_to(ROOT))


def blocks(page: Path) -> list[tuple[str, str]]:
    return FENCE.findall(page.read_text(encoding="utf-8"))


def settled(text: str) -> list[str]:
    """Lines to compare: what varies between machines is named instead of given."""
    for pattern, word in VARYING:
        text = pattern.sub(word, text)
    return [line.rstrip() for line in text.strip().splitlines()]


def same(shown: str, said: str) -> bool:
    """Whether the output is what the page shows; a line of three dots stands for any lines."""
    wanted, got = settled(shown), settled(said)
    if "..." not in wanted:
        return wanted == got
    cut = wanted.index("...")
    tail = wanted[cut + 1 :]
    return got[:cut] == wanted[:cut] and (not tail or got[-len(tail) :] == tail)


def run_console(text: str, capsys: pytest.CaptureFixture[str]) -> None:
    for part in re.split(r"^\$ ", text, flags=re.MULTILINE)[1:]:
        command, _, shown = part.partition("\n")
        words = shlex.split(command, comments=True)
        if words[0] == "cat":
            said = "".join(Path(word).read_text(encoding="utf-8") for word in words[1:])
        else:
            assert words[0] == "loopsim", f"cannot run: {command}"
            capsys.readouterr()
            main(words[1:])
            out, err = capsys.readouterr()
            said = out or err  # remarks beside an answer are not part of it
        if shown.strip():
            assert same(shown, said), f"$ {command}\nshown:\n{shown}\nsaid:\n{said}"


def run_python(text: str, space: dict[str, object], page: Path) -> str:
    printed = io.StringIO()
    with contextlib.redirect_stdout(printed):
        exec(compile(text, str(page), "exec"), space)
    return printed.getvalue()


@pytest.fixture
def workshop(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A folder of its own with a copy of the circuits."""
    shutil.copytree(ROOT / "circuits", tmp_path / "circuits")
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.mark.parametrize("page", PAGES, ids=names)
def test_the_examples_of_a_page_run(page: Path, workshop: Path, capsys: pytest.CaptureFixture[str]) -> None:
    space: dict[str, object] = {"__name__": "page"}
    printed: str | None = None
    for language, text in blocks(page):
        if language == "text" and printed is not None:
            assert same(text, printed), f"shown:\n{text}\nprinted:\n{printed}"
        printed = None
        if language == "loop":
            first, _, _ = text.partition("\n")
            if first.startswith("# file: "):
                target = workshop / first.removeprefix("# file: ").strip()
                target.parent.mkdir(parents=True, exist_ok=True)
                target.write_text(text, encoding="utf-8")
            elif re.search(r"^circuit ", text, re.MULTILINE):
                run_python("import loopsim; loopsim.parse(text)", {"text": text}, page)
        elif language == "console":
            run_console(text, capsys)
        elif language == "python":
            printed = run_python(text, space, page)


@pytest.mark.parametrize("page", PAGES, ids=names)
def test_links_between_pages_lead_somewhere(page: Path) -> None:
    text = FENCE.sub("", page.read_text(encoding="utf-8"))
    for target in LINK.findall(text):
        path = target.partition("#")[0]
        if path and "://" not in target:
            assert (page.parent / path).exists(), f"{names(page)} links to {target}"


@pytest.mark.parametrize("page", PAGES, ids=names)
def test_commands_in_shell_blocks_and_sentences_are_understood(page: Path) -> None:
    from loopsim.cli.options import parse_words

    text = page.read_text(encoding="utf-8")
    spoken = re.findall(r"`(loopsim [a-z]+ [^`\n]*)`", text)
    shell = [line for language, block in blocks(page) if language == "sh" for line in block.splitlines()]
    written = [match[0] for line in shell for match in re.findall(r"((?<![\w.-])loopsim [a-z]+ [^#&|;]*)", line) if match]
    for command in [*spoken, *written]:
        words = shlex.split(command)
        if len(words) < 2 or words[1] not in VERBS or words[-1] in {"...", "-h"}:
            continue
        parse_words(VERBS[words[1]], words[2:], COMMON)


def test_the_page_of_the_command_is_made_from_its_table() -> None:
    text = (ROOT / "docs/reference/cli.md").read_text(encoding="utf-8")
    assert text == with_verbs(text), "write it anew: python tests/write_pages.py"


def test_the_check_of_readme_is_what_ci_runs() -> None:
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    script = (ROOT / ".ci/run").read_text(encoding="utf-8")
    (command,) = re.findall(r"python (-m pytest[^\n`]*?)\s*$", readme, re.MULTILINE)
    assert f'python" {command}' in script


def test_every_word_of_the_command_is_on_the_page_of_words() -> None:
    words = (ROOT / "docs/reference/words.md").read_text(encoding="utf-8")
    for verb in VERBS.values():
        assert f"| {verb.name} |" in words
        for option in (*verb.options, *COMMON):
            assert f"`{option.name}`" in words, f"{option.name} of {verb.name}"


def test_every_word_of_the_language_is_on_the_page_of_words() -> None:
    from loopsim.devices.catalogue import DEVICES, field_specs, pins, waveform_specs
    from loopsim.language.measures import MEASURES
    from loopsim.language.mistakes import STATEMENTS

    words = (ROOT / "docs/reference/words.md").read_text(encoding="utf-8")
    forms = ("sine", "square", "ramp")
    public = {*STATEMENTS, *MEASURES, *DEVICES, *forms}
    for device in DEVICES:
        public |= {*pins(device), *field_specs(device)}
        public |= {word for spec in field_specs(device).values() for word in spec.words}
    for form in forms:
        public |= set(waveform_specs(form))
    missing = sorted(word for word in public if f"`{word}`" not in words)
    assert not missing


def test_text_that_varies_is_not_compared_and_the_rest_is() -> None:
    assert same("3 points (11 boxes, 9 ms)\n", "3 points (12 boxes, 0.4 s)\n")
    assert not same("3 points (11 boxes, 9 ms)\n", "4 points (11 boxes, 9 ms)\n")
    assert same("a\n...\nz\n", "a\nb\nc\nz\n")
    assert not same("a\n...\nz\n", "a\nb\nc\n")
    assert same("{\n...\n", "{\n1\n}\n")


@pytest.mark.parametrize("folder", ["explanation", "how-to"])
def test_every_page_is_reached_from_the_index(folder: str) -> None:
    pages = {path.name for path in (ROOT / "docs" / folder).glob("*.md")}
    index = ROOT / "docs" / ("explanation/index.md" if folder == "explanation" else "index.md")
    linked = {Path(target.partition("#")[0]).name for target in LINK.findall(index.read_text(encoding="utf-8"))}
    assert pages - {"index.md"} <= linked


def test_no_page_names_a_machine() -> None:
    for page in PAGES:
        text = page.read_text(encoding="utf-8")
        assert str(ROOT) not in text
        assert str(Path.home()) + "/" not in text


