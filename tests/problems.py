"""Problems with known derivatives, as data: cross them with every source of derivatives, claims and mistakes.

They stand in ``problem_sets/``: published least-squares problems in ``more_garbow_hillstrom.py``, constrained ones in
``hock_schittkowski.py``, functions of one number in ``one_variable.py``, models of our own in ``own_models.py``.
"""

from tests.problem_sets.hock_schittkowski import CONSTRAINTS as HOCK_SCHITTKOWSKI_CONSTRAINTS
from tests.problem_sets.hock_schittkowski import OBJECTIVES as HOCK_SCHITTKOWSKI
from tests.problem_sets.hock_schittkowski import OPTIMA as HOCK_SCHITTKOWSKI_OPTIMA
from tests.problem_sets.more_garbow_hillstrom import RESIDUALS as MORE_GARBOW_HILLSTROM
from tests.problem_sets.more_garbow_hillstrom import SUMS_OF_SQUARES as MORE_GARBOW_HILLSTROM_SUMS
from tests.problem_sets.one_variable import SPECIAL as SPECIAL_FUNCTIONS
from tests.problem_sets.one_variable import TEXTBOOK as TEXTBOOK_FUNCTIONS
from tests.problem_sets.own_models import MODELS as OWN_MODELS
from tests.problem_sets.record import OneVariable, ScalarProblem, VectorProblem

SCALAR: tuple[ScalarProblem, ...] = (*OWN_MODELS, *HOCK_SCHITTKOWSKI, *MORE_GARBOW_HILLSTROM_SUMS)
VECTOR: tuple[VectorProblem, ...] = (*MORE_GARBOW_HILLSTROM, *HOCK_SCHITTKOWSKI_CONSTRAINTS)
ONE_VARIABLE: tuple[OneVariable, ...] = (*TEXTBOOK_FUNCTIONS, *SPECIAL_FUNCTIONS)

__all__ = [
    "HOCK_SCHITTKOWSKI",
    "HOCK_SCHITTKOWSKI_CONSTRAINTS",
    "HOCK_SCHITTKOWSKI_OPTIMA",
    "MORE_GARBOW_HILLSTROM",
    "MORE_GARBOW_HILLSTROM_SUMS",
    "ONE_VARIABLE",
    "OWN_MODELS",
    "SCALAR",
    "SPECIAL_FUNCTIONS",
    "TEXTBOOK_FUNCTIONS",
    "VECTOR",
    "OneVariable",
    "ScalarProblem",
    "VectorProblem",
]
