"""Every exception of the package.

GradcheckError (Exception)
├── UsageError (ValueError)              the caller's mistake, told once, at the front door
│   ├── DerivativeShapeError             a claim whose shape does not fit the model's
│   ├── UnknownArgument (TypeError)      a keyword that the function does not take
│   ├── ModelNotFound                    ``package.module:attribute`` leads nowhere
│   └── MissingExtra                     an optional package is needed and not installed
├── ModelFailure (RuntimeError)          the model could not be evaluated at its start point
└── DerivativeMismatch (AssertionError)  a claimed derivative was refuted; its text is the report
UndecidedWarning (UserWarning)           a check that could not decide

All of them carry plain data and survive pickling, because they cross between worker processes.
"""

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from gradcheck.records.report import CheckReport


class GradcheckError(Exception):
    """What this package raises."""


class UsageError(GradcheckError, ValueError):
    """The call cannot be carried out as it stands: what, which value, and how to mend it."""


class DerivativeShapeError(UsageError):
    """A claimed derivative has a shape that does not fit the model.

    Attributes
    ----------
    name : str
        The claim, such as ``"gradient"``.
    expected, found : tuple of int
        The two shapes.
    """

    def __init__(
        self, message: str, name: str = "", expected: tuple[int, ...] = (), found: tuple[int, ...] = ()
    ) -> None:
        super().__init__(message)
        self.name = name
        self.expected = expected
        self.found = found

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.args[0], self.name, self.expected, self.found)


class UnknownArgument(UsageError, TypeError):
    """A keyword argument that the function does not take: which one, and which was meant."""


class ModelNotFound(UsageError):
    """The address of a model does not lead to one."""


class MissingExtra(UsageError):
    """Something asked for needs an optional package that is not installed.

    Attributes
    ----------
    package, extra : str
        What is missing, and the extra of this package that brings it.
    """

    def __init__(self, purpose: str, package: str, extra: str) -> None:
        super().__init__(
            f"{purpose} needs {package}, which is not installed; install it, or gradcheck with its extra {extra!r}"
        )
        self.purpose = purpose
        self.package = package
        self.extra = extra

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.purpose, self.package, self.extra)


class ModelFailure(GradcheckError, RuntimeError):
    """The model could not be evaluated at its start point.

    Attributes
    ----------
    reason : str
        One of ``"crash"``, ``"non-finite"``, ``"timeout"``.
    last_words : str
        The model's own message.
    """

    def __init__(self, message: str, reason: str = "crash", last_words: str = "") -> None:
        super().__init__(message)
        self.reason = reason
        self.last_words = last_words

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.args[0], self.reason, self.last_words)


class DerivativeMismatch(GradcheckError, AssertionError):
    """A claimed derivative was refuted (or left undecided where that was asked to raise); the text is the report.

    Attributes
    ----------
    report : CheckReport
        Everything that was found.
    why : str
        Why it is raised although nothing was refuted; the first line of the text. Empty for a refuted claim.
    """

    def __init__(self, report: "CheckReport", why: str = "") -> None:
        super().__init__(f"{why}\n{report}" if why else str(report))
        self.report = report
        self.why = why

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.report, self.why)


class UndecidedWarning(UserWarning):
    """A derivative could be neither confirmed nor refuted."""
