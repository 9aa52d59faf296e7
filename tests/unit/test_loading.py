"""From an address to a model."""

import os
import pickle
import sys

import pytest

from gradcheck.errors import ModelNotFound, UsageError
from gradcheck.problem.loading import importable, load, split_address


@pytest.fixture
def folder(tmp_path, monkeypatch):
    """A working directory of its own; modules imported from it are forgotten afterwards."""
    before, path = set(sys.modules), list(sys.path)
    monkeypatch.chdir(tmp_path)
    # The test run's own entry would find other files.
    monkeypatch.setattr(sys, "path", [entry for entry in path if entry not in ("", os.getcwd())])
    yield tmp_path
    for name in set(sys.modules) - before:
        del sys.modules[name]


def write(folder, name, text):
    path = folder / name
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(text, encoding="utf-8")
    return path


def test_a_module_in_the_working_directory_is_found(folder):
    write(folder, "wing_a.py", "def drag(x): return x")

    assert load("wing_a:drag")(3) == 3


def test_a_module_in_a_package_is_found(folder):
    write(folder, "plane_a/__init__.py", "")
    write(folder, "plane_a/wing.py", "from plane_a import __name__ as package\ndef drag(x): return package")

    assert load("plane_a.wing:drag")(0) == "plane_a"


def test_an_attribute_may_be_dotted(folder):
    write(folder, "wing_b.py", "class Wing:\n    class Tip:\n        length = 4")

    assert load("wing_b:Wing.Tip.length") == 4


def test_a_file_is_found_by_its_path(folder):
    path = write(folder, "models/wing.py", "def drag(x): return 2 * x")

    assert load("models/wing.py:drag")(2) == 4
    assert load(f"{path}:drag")(2) == 4


def test_one_file_is_imported_once_whatever_its_path_looks_like(folder):
    path = write(folder, "models/wing.py", "token = object()")

    assert load("models/wing.py:token") is load(f"{path}:token")


def test_two_files_of_one_name_do_not_meet(folder):
    write(folder, "a/wing.py", "name = 'a'")
    write(folder, "b/wing.py", "name = 'b'")

    assert (load("a/wing.py:name"), load("b/wing.py:name")) == ("a", "b")


def test_a_function_of_a_file_can_be_pickled(folder):
    write(folder, "wing.py", "def drag(x): return x")
    drag = load("wing.py:drag")

    assert pickle.loads(pickle.dumps(drag)) is drag


def test_a_file_imports_its_neighbours(folder):
    write(folder, "models/tables.py", "value = 7")
    write(folder, "models/wing_c.py", "from tables import value")

    assert load("models/wing_c.py:value") == 7


def test_the_search_path_is_as_before_afterwards(folder):
    write(folder, "models/wing.py", "x = 1")
    before = list(sys.path)
    load("models/wing.py:x")

    assert sys.path == before


def test_a_model_that_imports_inside_its_function_is_helped_for_as_long_as_it_is_asked_for(folder):
    write(folder, "models/late_table.py", "value = 7")
    write(folder, "models/wing_d.py", "def drag(x):\n    from late_table import value\n    return value")
    drag = load("models/wing_d.py:drag")

    with importable("models/wing_d.py:drag"):
        assert drag(0) == 7


@pytest.mark.parametrize(
    ("address", "parts"),
    [
        ("wing:drag", ("wing", "drag")),
        (r"C:\models\wing.py:drag", (r"C:\models\wing.py", "drag")),
        ("a.b:c.d", ("a.b", "c.d")),
    ],
)
def test_an_address_is_split_at_its_last_colon(address, parts):
    assert split_address(address) == parts


@pytest.mark.parametrize("address", ["wing", "wing.py", ":drag", "wing:", r"C:\models\wing.py", "", "wing:2 + 2"])
def test_an_address_without_an_attribute_is_refused_with_an_example(address):
    with pytest.raises(ModelNotFound, match=r"names no attribute; write .*:name"):
        load(address)


@pytest.mark.parametrize(
    ("address", "words"),
    [
        ("wing_e.py:drg", "did you mean drag?"),
        ("wing_e.py:Wing.lenth", "did you mean length?"),
        ("wing_e:drag.gradient", "'drag' has no attribute 'gradient'"),
        ("wingg_e.py:drag", "did you mean wing_e.py?"),
        ("wing_f:drag", "there is no module 'wing_f'; did you mean wing_e?"),
        ("plane_b.wings:drag", "there is no module 'plane_b.wings'; did you mean wing?"),
        ("no-module:drag", "neither a module name nor a Python file"),
        ("nowhere/wing.py:drag", "there is no file 'nowhere/wing.py'"),
    ],
)
def test_a_wrong_name_is_told_with_close_ones(folder, address, words):
    write(folder, "wing_e.py", "import os\nclass Wing:\n    length = 1\ndef drag(x): return x\ndef lift(x): return x")
    write(folder, "plane_b/__init__.py", "")
    write(folder, "plane_b/wing.py", "")

    with pytest.raises(ModelNotFound) as caught:
        load(address)

    assert words in str(caught.value)
    assert repr(address) in str(caught.value)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("x = 1\ny = 1 / 0", "ZeroDivisionError: division by zero (wing_g.py, line 2)"),
        ("import a_package_that_is_not_there", "No module named 'a_package_that_is_not_there'"),
        ("x = (", "SyntaxError"),
        ("import sys\nsys.exit('finished')", "SystemExit: finished"),
        ("raise SystemExit", 'guard that part with `if __name__ == "__main__":`'),
        ("from . import tables", "a file inside a package is addressed as package.module:name"),
    ],
)
@pytest.mark.parametrize("address", ["wing_g.py:drag", "wing_g:drag"])
def test_a_module_that_fails_has_its_last_words_in_the_error(folder, address, text, words):
    write(folder, "wing_g.py", text)

    with pytest.raises(ModelNotFound) as caught:
        load(address)

    assert words in str(caught.value)


def test_a_missing_neighbour_is_not_taken_for_the_model_itself(folder):
    write(folder, "wing_h.py", "import wing_table_that_is_missing")

    with pytest.raises(ModelNotFound, match="importing it failed with ModuleNotFoundError"):
        load("wing_h:drag")


def test_a_module_that_failed_is_tried_again_the_next_time(folder):
    path = write(folder, "wing.py", "raise ValueError")
    with pytest.raises(ModelNotFound):
        load("wing.py:drag")
    path.write_text("drag = 'mended'", encoding="utf-8")

    assert load("wing.py:drag") == "mended"


def test_an_interrupt_during_the_import_is_an_interrupt(folder):
    write(folder, "wing.py", "raise KeyboardInterrupt")

    with pytest.raises(KeyboardInterrupt):
        load("wing.py:drag")


def test_a_model_that_is_not_found_is_a_usage_error():
    assert issubclass(ModelNotFound, UsageError)
