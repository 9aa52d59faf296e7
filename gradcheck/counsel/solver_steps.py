"""Steps for the user's own solver, as a record and as Python to paste."""

from collections.abc import Sequence

import numpy as np

from gradcheck.health.step_choice import StepChoice
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.records.noise import NoiseKind
from gradcheck.records.report import Steps
from gradcheck.wording import listed


def solver_steps(
    function: str,
    names: tuple[str, ...],
    choice: StepChoice,
    smooth: BoolArray,
    noise_kind: NoiseKind = NoiseKind.NOT_EXAMINED,
) -> Steps:
    """The record of the steps of one function.

    Parameters
    ----------
    function : str
    names : tuple of str
        Names of the variables that `smooth` picks.
    choice : StepChoice
    smooth : ndarray of bool, shape (d,)
        Variables that are no whole numbers.
    noise_kind : NoiseKind
        Passed on.
    """
    return Steps(
        function=function,
        names=names,
        noise=choice.noise,
        noise_kind=noise_kind,
        **{
            name: np.array(getattr(choice, name)[smooth])
            for name in ("forward", "forward_error", "forward_side", "central", "central_error", "central_side")
        },
    )


def steps_to_paste(all_steps: Sequence[Steps], names: Sequence[str], start: Array) -> list[str]:
    """Lines of Python: absolute steps by variable, and the same in the form that scipy takes.

    Parameters
    ----------
    all_steps : sequence of Steps
        The first ones are those of the objective; the others follow in one table.
    names : sequence of str
        All variables of the problem, in their order.
    start : ndarray, shape (n,)
        The start point, which the steps belong to.

    Returns
    -------
    list of str
        Empty without steps. scipy's form is left out where some variable has no step, and the one in units of x where
        some variable is 0.

    Notes
    -----
    scipy (1.17, `scipy.optimize.minimize`) multiplies ``finite_diff_rel_step`` by x itself for ``jac="2-point"``, hence
    its sign, and by ``|x|`` for ``"3-point"``; where x is 0 it takes a step of its own. Without `jac` it takes absolute
    steps, ``eps``. Its SLSQP ignores the steps of a ``NonlinearConstraint`` and takes those of the objective.
    """
    if not all_steps:
        return []
    main = all_steps[0]
    what = f"differences of {main.function}"
    lines = table_to_paste("forward_steps", f"steps for forward {what}", main.names, _signed(main))
    lines += table_to_paste("central_steps", f"steps for central {what}", main.names, main.central)
    for name, side in zip(main.names, main.central_side, strict=True):
        if side:
            lines.append(f"# {name!r} is at a bound: its central step is for x, x {_sign(side)} h, x {_sign(side)} 2 h")
    if tuple(names) == main.names and np.isfinite([main.forward, main.central]).all():
        lines += _for_scipy(main, start)
    if len(all_steps) > 1:
        lines += _of_other_functions(all_steps[1:])
    return lines


def table_to_paste(name: str, comment: str, names: Sequence[str], values: Array) -> list[str]:
    """A dict of one line a variable, so that nobody has to count positions; variables without a value are named."""
    rows = [
        f"    {variable!r}: {value:.3g},"
        if np.isfinite(value)
        else f"    # {variable!r}: no step gives a derivative at the start point"
        for variable, value in zip(names, values, strict=True)
    ]
    return [f"{name} = {{  # {comment}", *rows, "}"]


def _signed(steps: Steps) -> Array:
    return np.asarray(steps.forward * steps.forward_side)


def _sign(side: float) -> str:
    return "+" if side > 0 else "-"


def _for_scipy(steps: Steps, start: Array) -> list[str]:
    if not np.all(start):
        return _absolute(steps, [name for name, x in zip(steps.names, start, strict=True) if x == 0])
    forward, central = _signed(steps) / start, steps.central / np.abs(start)
    return [
        "# the same in units of x, as scipy.optimize.minimize takes them; for other methods: step = value * x",
        f"forward_relative = [{', '.join(f'{value:.6g}' for value in forward)}]",
        f"central_relative = [{', '.join(f'{value:.6g}' for value in central)}]",
        '# forward: jac="2-point", options={"finite_diff_rel_step": forward_relative}',
        '# central: jac="3-point", options={"finite_diff_rel_step": central_relative}',
        '# forward, absolute: no jac, options={"eps": list(forward_steps.values())}',
    ]


def _absolute(steps: Steps, zero: Sequence[str]) -> list[str]:
    """Where some variable is 0, a step in units of x is none; scipy would take one of its own there, without a word."""
    lines = [
        f"# x is 0 for {listed(list(map(repr, zero)))}: scipy.optimize.minimize cannot take steps in units of x there",
        '# forward: no jac, options={"eps": list(forward_steps.values())}',
    ]
    if not steps.central_side.any():
        lines.append("# central, of f, away from bounds: jac=lambda x: [(f(x + h) - f(x - h)) / (2 * h.sum())")
        lines.append("#              for h in numpy.diag(list(central_steps.values()))]")
    return lines


def _of_other_functions(others: Sequence[Steps]) -> list[str]:
    lines = ["other_steps = {  # function: variable: (forward, central)"]
    for steps in others:
        pairs = zip(steps.names, _signed(steps), steps.central, strict=True)
        rows = [f"        {name!r}: ({f:.3g}, {c:.3g})," for name, f, c in pairs if np.isfinite([f, c]).all()]
        lines += [f"    {steps.function!r}: {{", *rows, "    },"]
    return [
        *lines,
        "}",
        '# scipy: method="SLSQP" takes the steps of the objective for constraints too, unless they bring a jac;',
        '# "trust-constr" takes NonlinearConstraint(..., finite_diff_rel_step=[step / x, ...])',
    ]
