"""What to do about the model: which derivative, which solver family, and why."""

from dataclasses import dataclass, field
from enum import StrEnum


class Family(StrEnum):
    """The two families of solvers."""

    GRADIENT_BASED = "gradient-based"
    GRADIENT_FREE = "gradient-free"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Advice:
    """Advice built from the evidence of an audit.

    Attributes
    ----------
    family : Family
    derivatives : tuple of str
        Which derivative source to use for which function, best first.
    solvers : tuple of str
        Methods under their published names, best first.
    reasons : tuple of str
        Why; each names its finding.
    tolerances : dict
        Stopping tolerances that the noise makes sensible, by name.
    snippet : str
        Steps, scaling and tolerances as Python to paste.
    caution : str
        What this advice is not.
    """

    family: Family
    derivatives: tuple[str, ...]
    solvers: tuple[str, ...]
    reasons: tuple[str, ...]
    tolerances: dict[str, float] = field(default_factory=dict)
    snippet: str = ""
    caution: str = ""
