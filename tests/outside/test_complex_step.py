"""The complex step on the functions of the papers that introduced it.

Lyness & Moler, SIAM J. Numer. Anal. 4 (1967) 202-210; Squire & Trapp, SIAM Review 40 (1998) 110-112; Martins, Sturdza &
Alonso, ACM TOMS 29 (2003) 245-262; the fourth function is that of Gill, Murray, Saunders & Wright, SIAM J. Sci. Stat.
Comput. 4 (1983) 310-321. Values computed with 50 digits; which function stands in which paper is from memory.
"""

import pytest

from tests.hearing import complex_step_on, session_of
from tests.problems import TEXTBOOK_FUNCTIONS


@pytest.mark.parametrize("problem", TEXTBOOK_FUNCTIONS, ids=lambda problem: problem.name)
def test_the_published_derivative_is_met_to_rounding(problem):
    testimony = complex_step_on(session_of(problem.function, problem.x))

    error = abs(testimony.value[0, 0] - problem.derivative)
    assert error <= 1e-15 * abs(problem.derivative)
    assert error <= testimony.bound[0, 0] <= 1e-11 * abs(problem.derivative)
