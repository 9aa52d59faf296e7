"""Steps for the user's own solver, as a record and as Python to paste."""

import numpy as np

from gradcheck.health.step_choice import StepChoice
from gradcheck.records.arrays import BoolArray
from gradcheck.records.report import Steps


def solver_steps(function: str, names: tuple[str, ...], choice: StepChoice, smooth: BoolArray) -> Steps:
    """The record of the steps of one function.

    Parameters
    ----------
    function : str
    names : tuple of str
        Names of the variables that `smooth` picks.
    choice : StepChoice
    smooth : ndarray of bool, shape (d,)
        Variables that are no whole numbers.
    """
    return Steps(
        function=function,
        names=names,
        noise=choice.noise,
        **{
            name: np.array(getattr(choice, name)[smooth])
            for name in ("forward", "forward_error", "forward_side", "central", "central_error", "central_side")
        },
    )
