"""Text in, answer out, one direction: a module imports only from layers that stand before its own."""

import ast
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
PACKAGE = ROOT / "loopsim"

# from left to right; what stands in one group may import from groups before it and from its own
LAYERS = (
    ("_version", "printable"),
    ("errors",),
    ("units", "expressions"),
    ("numerics",),
    ("devices",),
    ("circuit",),
    ("build",),
    ("language",),
    ("equations",),
    ("analyses",),
    ("requirements",),
    ("output",),
    ("cli", "pytest_plugin", "__main__"),
)
RANK = {name: rank for rank, group in enumerate(LAYERS) for name in group}

# the scalar nonlinearities and their enclosures are functions of arrays that import nothing but numerics: one source for the
# devices that are built from them and for the loops that are compiled from them
SHARED = {("numerics", "loopsim.devices.phi"), ("numerics", "loopsim.devices.phi_enclosure")}

# doors that open to the right, inside functions only: convenience methods of Circuit, printing of results
DOORS = {
    "circuit": {"language", "equations", "analyses", "requirements", "output"},
    "analyses": {"output"},
    "requirements": {"output"},
}


def _layer(path: Path) -> str:
    return path.relative_to(PACKAGE).parts[0].removesuffix(".py")


def _imports(tree: ast.AST) -> list[tuple[str, bool]]:
    """(module, at module level) of every import of loopsim that runs, type-only ones left out."""
    found: list[tuple[str, bool]] = []

    def walk(node: ast.AST, top: bool) -> None:
        for child in ast.iter_child_nodes(node):
            if isinstance(child, ast.If) and "TYPE_CHECKING" in ast.unparse(child.test):
                for other in child.orelse:
                    walk(other, top)
                continue
            if isinstance(child, ast.Import):
                found.extend((alias.name, top) for alias in child.names if alias.name.split(".")[0] == "loopsim")
            elif isinstance(child, ast.ImportFrom) and (child.module or "").split(".")[0] == "loopsim":
                found.extend((name, top) for name in sorted(_modules(child)))
            inside = isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda)
            walk(child, top and not inside)

    walk(tree, True)
    return found


def _modules(node: ast.ImportFrom) -> set[str]:
    """`from loopsim.devices import phi` names the module loopsim.devices.phi, other names the module itself."""
    package = PACKAGE.parent.joinpath(*(node.module or "").split("."))
    return {
        f"{node.module}.{alias.name}"
        if (package / f"{alias.name}.py").exists() or (package / alias.name).is_dir()
        else str(node.module)
        for alias in node.names
    }


FILES = sorted(path for path in PACKAGE.rglob("*.py") if path.parent != PACKAGE or path.name != "__init__.py")


@pytest.mark.parametrize("path", FILES, ids=lambda path: str(path.relative_to(ROOT)))
def test_a_module_imports_only_from_layers_before_its_own(path: Path) -> None:
    own = _layer(path)
    for module, top in _imports(ast.parse(path.read_text(encoding="utf-8"))):
        parts = module.split(".")
        other = parts[1] if len(parts) > 1 else ""
        assert other in RANK, f"{path.name} imports {module}: no layer of that name in {__file__}"
        door = not top and other in DOORS.get(own, set())
        allowed = RANK[other] <= RANK[own] or (own, module) in SHARED or door
        assert allowed, f"{path.relative_to(ROOT)} imports {module}, which stands after it"


def test_numerics_knows_arrays_and_never_circuits() -> None:
    for path in (PACKAGE / "numerics").rglob("*.py"):
        for module, _ in _imports(ast.parse(path.read_text(encoding="utf-8"))):
            assert not module.startswith(("loopsim.circuit", "loopsim.language", "loopsim.equations")), path


def test_every_module_has_a_place_in_the_order() -> None:
    names = {_layer(path) for path in FILES}
    assert names <= set(RANK), f"no layer for {sorted(names - set(RANK))}"


def test_the_walk_sees_imports_at_both_levels_and_skips_type_only_ones() -> None:
    source = (
        "import loopsim.cli\nfrom loopsim import errors\nfrom typing import TYPE_CHECKING\n"
        "if TYPE_CHECKING:\n    import loopsim.output\n"
        "def f():\n    from loopsim.analyses.states import states\n"
    )
    assert _imports(ast.parse(source)) == [
        ("loopsim.cli", True),
        ("loopsim.errors", True),
        ("loopsim.analyses.states", False),
    ]


def test_no_two_files_of_tests_share_a_name() -> None:
    """The folders of tests are no packages: pytest takes a second module of the same name for the first, and stops."""
    names = [path.name for path in (ROOT / "tests").rglob("*.py")]
    assert sorted(names) == sorted(set(names))
