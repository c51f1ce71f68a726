"""What `import loopsim` gives, and how little it loads."""

import os
import subprocess
import sys
from importlib import resources
from pathlib import Path

import pytest

import loopsim

ROOT = Path(__file__).parent.parent


@pytest.mark.parametrize("name", loopsim.__all__)
def test_every_public_name_is_there(name: str) -> None:
    assert getattr(loopsim, name) is not None
    assert name in dir(loopsim)


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="no attribute 'staets'"):
        loopsim.staets


def test_importing_it_loads_no_numerical_library() -> None:
    program = "import loopsim, sys; sys.exit(', '.join({'numpy', 'scipy', 'networkx', 'lark'} & set(sys.modules)) or 0)"
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    done = subprocess.run([sys.executable, "-c", program], env=environment, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_the_package_carries_its_types_and_its_grammar() -> None:
    files = resources.files("loopsim")
    assert (files / "py.typed").is_file()
    assert (files / "language" / "grammar.lark").is_file()
