"""The public names: exactly these, each there, each loaded only when it is used."""

from pathlib import Path

import pytest

import gradcheck

PUBLIC = [
    "Advice",
    "AuditReport",
    "CheckReport",
    "DerivativeMismatch",
    "DerivativeShapeError",
    "DiagnosisCode",
    "Estimate",
    "Family",
    "Finding",
    "FindingCode",
    "Function",
    "GradcheckError",
    "ModelFailure",
    "ModelNotFound",
    "NoiseKind",
    "Output",
    "Problem",
    "Scan",
    "Severity",
    "UndecidedWarning",
    "UsageError",
    "Variable",
    "Verdict",
    "args",
    "audit",
    "check",
    "estimate",
    "model",
    "points",
    "scan",
]


def test_the_public_names_are_exactly_these() -> None:
    assert gradcheck.__all__ == PUBLIC


@pytest.mark.parametrize("name", PUBLIC)
def test_each_public_name_loads_and_says_its_own_name(name: str) -> None:
    assert getattr(gradcheck, name).__name__ == name


@pytest.mark.parametrize("name", PUBLIC)
def test_a_public_name_is_the_same_thing_on_second_use(name: str) -> None:
    assert getattr(gradcheck, name) is getattr(gradcheck, name)


def test_no_public_name_is_also_a_module_that_would_take_its_place() -> None:
    modules = {path.stem for path in Path(gradcheck.__file__).parent.iterdir()}

    assert modules.isdisjoint(PUBLIC)


def test_dir_shows_every_public_name() -> None:
    assert set(PUBLIC) <= set(dir(gradcheck))


def test_dir_shows_nothing_that_serves_the_package_only() -> None:
    shown = {name for name in dir(gradcheck) if not name.startswith("__")}
    modules = {path.stem for path in Path(gradcheck.__file__).parent.iterdir()}

    assert shown - modules == set(PUBLIC)


def test_every_public_name_is_documented() -> None:
    undocumented = [name for name in PUBLIC if not getattr(gradcheck, name).__doc__]

    assert undocumented == []


def test_an_unknown_name_is_an_attribute_error_that_names_it() -> None:
    with pytest.raises(AttributeError, match="no attribute 'chekc'"):
        _ = gradcheck.chekc
