"""README.md is true: its code runs, and what it shows is what the program says."""

import doctest

import pytest

from tests import readme


def test_the_examples_run_as_they_stand():
    examples = doctest.DocTestParser().get_doctest(readme.python_examples(), {}, "README.md", "README.md", 0)
    complaints: list[str] = []

    doctest.DocTestRunner().run(examples, out=complaints.append)

    assert len(examples.examples) > 8
    assert "".join(complaints) == ""


@pytest.mark.parametrize("name", readme.OUTPUTS)
def test_the_output_shown_is_what_the_program_says_but_for_figures_that_vary(name):
    shown = [readme.without_figures(line) for line in readme.block(f"output: {name}").splitlines()]
    said = iter([readme.without_figures(line) for line in readme.OUTPUTS[name]().splitlines()])
    if name == "scan":  # the stars of the plot follow the last digits of the machine
        shown = [line for line in shown if "|" not in line]

    missing = [line for line in shown if line != "..." and line not in said]

    assert missing == []


def test_both_set_up_commands_are_marked_and_stand_on_one_line():
    for name in ("demo command", "test command"):
        assert readme.block(name).startswith("python3 -m venv .venv && ")
        assert len(readme.block(name).splitlines()) == 1


def test_the_picture_shown_is_the_one_that_the_program_draws_but_for_figures_that_vary():
    name = f"tests/pictures/{readme.PICTURE.name}"
    shown = readme.told_by(readme.PICTURE.read_text(encoding="utf-8"))

    assert f"]({name})" in readme.README.read_text(encoding="utf-8")
    assert readme.without_figures(shown) == readme.without_figures(readme.told_by(readme.scanned().to_svg()))
