"""What it costs to have the package installed: nothing is loaded before it is needed."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

import gradcheck

ROOT = Path(gradcheck.__file__).parents[1]

#: Slow to load, or not everybody's; `click` and `rich` belong to the command alone.
HEAVY = ["numpy", "scipy", "jax", "autograd", "mpmath", "sympy", "click", "rich", "hypothesis", "matplotlib", "jinja2"]

IDLE = """
def test_of_somebody_else():
    assert 1 + 1 == 2

class TestMore:
    def test_method(self):
        assert True
"""

MARKED = """
import pytest

@pytest.mark.gradcheck(at=[2.0], gradient=lambda x: [2 * x[0]])
def square(x):
    return x[0] ** 2
"""


def loaded_after(program: str, directory: Path) -> set[str]:
    """Top-level packages and modules of ours that a fresh interpreter holds after a program."""
    # Other people's plugins may load what they like; only ours is looked at.
    environment = os.environ | {"PYTHONPATH": str(ROOT), "PYTEST_DISABLE_PLUGIN_AUTOLOAD": "1"}
    done = subprocess.run(
        [sys.executable, "-c", f"import sys\n{program}\nprint('LOADED', *sys.modules)"],
        cwd=directory,
        env=environment,
        capture_output=True,
        text=True,
        check=True,
    )
    return set(done.stdout.rpartition("LOADED")[2].split())


def pytest_run(*arguments: str) -> str:
    options = ["-p", "gradcheck.pytest_plugin", "-p", "no:cacheprovider", *arguments]
    return f"import pytest\nassert pytest.main({options!r}) == 0"


def ours(loaded: set[str]) -> set[str]:
    return {name for name in loaded if name.partition(".")[0] == "gradcheck"}


def test_importing_the_package_loads_no_other_package(tmp_path: Path) -> None:
    before = loaded_after("", tmp_path)
    after = loaded_after("import gradcheck", tmp_path)

    assert after.isdisjoint(HEAVY)
    assert ours(after) == {"gradcheck"}
    assert {name.partition(".")[0] for name in after - before} <= {"gradcheck"} | sys.stdlib_module_names


def test_describing_a_model_needs_neither_numpy_nor_pytest(tmp_path: Path) -> None:
    program = "import gradcheck\n@gradcheck.model(at=[1.0], gradient=[1.0])\ndef model(x): return x[0]"

    assert loaded_after(program, tmp_path).isdisjoint([*HEAVY, "pytest"])


@pytest.mark.parametrize("option", ["--verbose", "--collect-only", "--markers"])
def test_an_idle_pytest_run_loads_the_plugin_file_and_nothing_else(tmp_path: Path, option: str) -> None:
    (tmp_path / "test_idle.py").write_text(IDLE, encoding="utf-8")

    loaded = loaded_after(pytest_run(option), tmp_path)

    assert loaded.isdisjoint(HEAVY)
    assert ours(loaded) == {"gradcheck", "gradcheck.pytest_plugin"}


def test_a_run_with_a_mark_does_load_what_checks(tmp_path: Path) -> None:
    (tmp_path / "test_marked.py").write_text(MARKED, encoding="utf-8")

    loaded = loaded_after(pytest_run(), tmp_path)

    assert {"numpy", "gradcheck.checking"} <= loaded
    assert loaded.isdisjoint(["jax", "autograd", "click", "rich", "hypothesis", "matplotlib", "jinja2"])
