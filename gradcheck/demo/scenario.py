"""The demonstration: an invented heating branch with faults planted in it, and the list of what is planted where.

Four buildings stand along one branch of a heating network. Eight variables: the inner diameters of the four
segments, the insulation's thickness, the pumps' speed, the supply temperature and the number of pumps. To be made
small: the yearly cost. To be kept: pressure at the farthest building on the design day, flow velocities, and the
temperature that arrives at the farthest building on a summer night. All data are invented, the formulas are
published ones.

Planted, because real models have them:

* a mistake in the hand-written gradient of the cost (a forgotten factor 2 in one term of one entry);
* kinks, where the pump's table has knots;
* a jump, where the friction law of the last segment turns from laminar to turbulent;
* noise in the temperature, from an inner iteration that stops at a tolerance;
* a whole number among the variables, which the model rounds.
"""

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from gradcheck.demo.branch import CARRIED, HEAT_CAPACITY, RETURN, VISCOSITY, Branch, design_of, flow_per_pump
from gradcheck.demo.branch_derivatives import BranchDerivatives
from gradcheck.demo.heating import REYNOLDS_SWITCH
from gradcheck.demo.pump_curve import PumpCurve, pump_curve
from gradcheck.errors import UsageError
from gradcheck.problem.problem import Function, Problem, Variable
from gradcheck.records.finding import FindingCode

CAUTION = (
    "This demonstration is no design tool: its branch, prices and fluid are invented and its formulas simplified. "
    "A verified derivative is not a verified model. For a real network, local codes and licensed practice decide."
)

#: Invented pump: (volume flow in m³/h, head in kPa) at full speed.
DEFAULT_PUMP_TABLE = ((0.0, 95.0), (0.8, 87.0), (1.6, 70.0), (3.2, 18.0), (6.0, 0.0))

#: Relative width at which the summer night's bisection stops. The teeth it leaves are then so narrow (1e-8 of a
#: variable and less) that they act as noise at every step a difference can use. Far coarser values (1e-6) make teeth
#: wide enough to differentiate *inside* one, where the program's slope is not the model's.
DEFAULT_INNER_TOLERANCE = 1e-10

VARIABLES = (
    Variable("diameter_1", 0.050, lower=0.035, upper=0.080, unit="m"),
    Variable("diameter_2", 0.040, lower=0.028, upper=0.060, unit="m"),
    Variable("diameter_3", 0.030, lower=0.020, upper=0.045, unit="m"),
    Variable("diameter_4", 0.018, lower=0.013, upper=0.032, unit="m"),
    Variable("insulation", 0.030, lower=0.012, upper=0.080, unit="m"),
    Variable("pump_speed", 1.0, lower=0.70, upper=1.15),
    Variable("supply_temperature", 70.0, lower=60.0, upper=78.0, unit="degC"),
    Variable("pumps", 2, lower=1, upper=4, integer=True),
)

# Rounding alone stays below this; above it the audit calls it noise. The temperature carries about 1.3 times the
# inner tolerance (rms, relative) at the start point.
_VISIBLE_TOLERANCE = 100 * 2.0**-52


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Planted:
    """One thing that an audit of the scenario may find.

    Attributes
    ----------
    kind : FindingCode
    function : str
        ``"objective"``, or the name of a constraint; empty where it belongs to no single function.
    variable : str
        Empty where it belongs to no single variable.
    places : tuple of float
        Values of `variable` on its line through the start point; empty for what has no place.
    certain : bool
        False for a consequence that an audit may also report, depending on how it looks.
    """

    kind: FindingCode
    function: str
    variable: str = ""
    places: tuple[float, ...] = ()
    certain: bool = True


def branch_problem(
    *,
    mended: bool = False,
    pump_table: Sequence[tuple[float, float]] = DEFAULT_PUMP_TABLE,
    inner_tolerance: float = DEFAULT_INNER_TOLERANCE,
) -> Problem:
    """The heating branch as a problem with hand-written derivatives.

    Parameters
    ----------
    mended : bool
        Whether the planted mistake in the cost's gradient is put right; the other faults are the model's nature.
    pump_table : sequence of (flow in m³/h, head in kPa)
        Knots of the pump curve at full speed.
    inner_tolerance : float
        Relative, from 1e-15 to 0.01. At the default the temperature's derivatives are right, and yet cannot be
        confirmed to 1e-8 by looking at values: its noise forbids it. At 1e-15 they can.

    Raises
    ------
    UsageError
        If the table is no table or the tolerance is out of range.

    Examples
    --------
    >>> problem = branch_problem(mended=True)
    >>> len(problem.variables), sorted(problem.constraints)
    (8, ['pressure', 'temperature', 'velocity'])
    """
    branch = _branch(pump_table, inner_tolerance)
    claims = BranchDerivatives(branch=branch, mended=mended)
    return Problem(
        name="heating branch",
        variables=VARIABLES,
        objective=Function(branch.yearly_cost, gradient=claims.yearly_cost),
        constraints={
            "pressure": Function(branch.pressure_left, gradient=claims.pressure_left, lower=25.0),  # kPa
            "temperature": Function(
                branch.farthest_temperature, gradient=claims.farthest_temperature, lower=38.0
            ),  # degC
            "velocity": Function(branch.velocities, jacobian=claims.velocities, upper=1.0),  # m/s
        },
    )


def planted_in(
    *,
    mended: bool = False,
    pump_table: Sequence[tuple[float, float]] = DEFAULT_PUMP_TABLE,
    inner_tolerance: float = DEFAULT_INNER_TOLERANCE,
) -> tuple[Planted, ...]:
    """What is planted in `branch_problem` with the same options; every place is computed from the branch's data.

    Examples
    --------
    >>> [item.variable for item in planted_in() if item.kind == "jump"]
    ['diameter_4']
    """
    branch = _branch(pump_table, inner_tolerance)
    items: list[Planted] = []
    if not mended:
        items.append(Planted(kind=FindingCode.CLAIM_REFUTED, function="objective", variable="insulation"))
    items.extend(_kinks(branch.pump))
    items.extend(_jumps())
    if inner_tolerance > _VISIBLE_TOLERANCE:
        items.append(Planted(kind=FindingCode.NOISE, function="temperature"))
        items.append(Planted(kind=FindingCode.CLAIM_UNDECIDED, function="temperature", certain=False))
    items.append(Planted(kind=FindingCode.INTEGER_VARIABLE, function="", variable="pumps"))
    items.extend(_consequences_of_rounding())
    items.extend(_consequences_of_comparing())
    return tuple(items)


def _branch(pump_table: Sequence[tuple[float, float]], inner_tolerance: float) -> Branch:
    if not 1e-15 <= inner_tolerance <= 1e-2:
        raise UsageError(
            f"inner_tolerance is {inner_tolerance!r}; the bisection needs a relative width from 1e-15 to 0.01"
        )
    return Branch(pump=pump_curve(pump_table), inner_tolerance=inner_tolerance)


def _start() -> list[float]:
    return [variable.value for variable in VARIABLES]


def _inside(variable: Variable, places: Iterator[float]) -> tuple[float, ...]:
    return tuple(sorted(place for place in places if variable.lower < place < variable.upper))


def _by_name(name: str) -> Variable:
    return next(variable for variable in VARIABLES if variable.name == name)


def _kinks(pump: PumpCurve) -> Iterator[Planted]:
    """Where the flow through one pump passes a knot; cost and pressure both read the table.

    The flow is proportional to 1/speed and to 1/(supply - return).
    """
    design = design_of(_start())
    ratios = [flow_per_pump(design) / knot for knot in pump.kinks() if knot > 0.0]
    lines = {
        "pump_speed": (design.speed * ratio for ratio in ratios),
        "supply_temperature": (RETURN + (design.supply - RETURN) * ratio for ratio in ratios),
    }
    for name, places in lines.items():
        inside = _inside(_by_name(name), places)
        if inside:
            for function in ("objective", "pressure"):
                yield Planted(kind=FindingCode.KINK, function=function, variable=name, places=inside)


def _jumps() -> Iterator[Planted]:
    """Where a segment's Reynolds number, 4·flow/(π·diameter·viscosity), passes the switch of the friction law."""
    design = design_of(_start())
    reached = REYNOLDS_SWITCH * math.pi * VISCOSITY / 4.0  # flow over diameter at the switch, kg/(s·m)
    lines: dict[str, list[float]] = {"supply_temperature": []}
    for k, (load, flow, diameter) in enumerate(zip(CARRIED, design.flows, design.diameters, strict=True)):
        lines[f"diameter_{k + 1}"] = [flow / reached]
        lines["supply_temperature"].append(RETURN + load / (HEAT_CAPACITY * reached * diameter))
    for name, places in lines.items():
        inside = _inside(_by_name(name), iter(places))
        if inside:
            yield Planted(kind=FindingCode.JUMP, function="pressure", variable=name, places=inside)


def _consequences_of_rounding() -> Iterator[Planted]:
    """Half-way between whole numbers cost and pressure step; between the steps a zero slope proves nothing."""
    pumps = _by_name("pumps")
    steps = tuple(whole + 0.5 for whole in range(math.ceil(pumps.lower), math.floor(pumps.upper)))
    for function in ("objective", "pressure"):
        for kind, places in ((FindingCode.STAIRCASE, steps), (FindingCode.CLAIM_UNDECIDED, ())):
            yield Planted(kind=kind, function=function, variable="pumps", places=places, certain=False)


def _consequences_of_comparing() -> Iterator[Planted]:
    """Real logarithms, a table and a bisection: no complex number gets through, and the model says so by raising."""
    for function in ("objective", "pressure", "temperature"):
        yield Planted(kind=FindingCode.COMPLEX_UNSAFE, function=function, certain=False)


PLANTED = planted_in()

problem = branch_problem()
