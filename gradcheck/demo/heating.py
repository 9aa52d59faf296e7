"""Published formulas for a buried heating pipe, and their slopes written out by hand.

Plain numbers in, plain numbers out: one pipe at a time. Nothing here belongs to the demonstration's invented branch.
The laminar law and the switch at `REYNOLDS_SWITCH` meet with a jump, as in most programs in use.
"""

import math

#: Reynolds number at which common practice leaves the laminar law (textbook figure for pipes).
REYNOLDS_SWITCH = 2300.0


def reynolds(flow: float, diameter: float, viscosity: float) -> float:
    """Reynolds number of a full round pipe, 4·flow/(π·diameter·viscosity).

    Parameters
    ----------
    flow : float
        Mass flow, kg/s, > 0.
    diameter : float
        Inner diameter, m, > 0.
    viscosity : float
        Dynamic viscosity, Pa·s, > 0.

    Returns
    -------
    float
        Dimensionless; NaN goes through.

    Examples
    --------
    >>> round(reynolds(0.1, 0.04, 1e-3), 3)
    3183.099
    """
    return 4.0 * flow / (math.pi * diameter * viscosity)


def friction_factor(reynolds_number: float, relative_roughness: float) -> float:
    """Darcy friction factor of a round pipe, with a jump where the law changes.

    Parameters
    ----------
    reynolds_number : float
        > 0.
    relative_roughness : float
        Roughness over inner diameter, >= 0.

    Returns
    -------
    float
        64/Re (Hagen-Poiseuille) below `REYNOLDS_SWITCH`; from there on Swamee and Jain, "Explicit equations for
        pipe-flow problems", Journal of the Hydraulics Division (ASCE) 102 (1976) 657-664. Their range begins at
        Re = 5000; using it down to the switch is common practice and is part of why the jump is so large.

    Examples
    --------
    >>> round(friction_factor(2299.0, 0.0), 6), round(friction_factor(2300.0, 0.0), 6)
    (0.027838, 0.04866)
    """
    if reynolds_number < REYNOLDS_SWITCH:
        return 64.0 / reynolds_number
    return 0.25 / _swamee_jain_logarithm(reynolds_number, relative_roughness) ** 2


def friction_slopes(reynolds_number: float, relative_roughness: float) -> tuple[float, float]:
    """Slopes of `friction_factor` by Reynolds number and by relative roughness, on the side where the point lies.

    Examples
    --------
    >>> by_reynolds, by_roughness = friction_slopes(1000.0, 0.001)
    >>> by_reynolds, by_roughness
    (-6.4e-05, 0.0)
    """
    if reynolds_number < REYNOLDS_SWITCH:
        return -64.0 / reynolds_number**2, 0.0
    logarithm = _swamee_jain_logarithm(reynolds_number, relative_roughness)
    argument = _swamee_jain_argument(reynolds_number, relative_roughness)
    by_argument = -0.5 / logarithm**3 / (argument * math.log(10.0))
    return by_argument * (-0.9 * 5.74 * reynolds_number**-1.9), by_argument / 3.7


def _swamee_jain_argument(reynolds_number: float, relative_roughness: float) -> float:
    argument: float = relative_roughness / 3.7 + 5.74 / reynolds_number**0.9
    return argument


def _swamee_jain_logarithm(reynolds_number: float, relative_roughness: float) -> float:
    return math.log10(_swamee_jain_argument(reynolds_number, relative_roughness))


def pressure_loss(friction: float, flow: float, diameter: float, length: float, density: float) -> float:
    """Pressure loss of a straight full pipe (Darcy-Weisbach), friction·(length/diameter)·density·velocity²/2.

    Parameters
    ----------
    friction : float
        Darcy friction factor.
    flow : float
        Mass flow, kg/s.
    diameter, length : float
        m.
    density : float
        kg/m³.

    Returns
    -------
    float
        Pa. Source: Darcy 1857, Weisbach 1845; the mass flow stands in for the velocity 4·flow/(π·density·diameter²).

    Examples
    --------
    >>> round(pressure_loss(0.03, 1.0, 0.05, 100.0, 1000.0), 3)
    7781.467
    """
    return friction * 8.0 * length * flow**2 / (math.pi**2 * density * diameter**5)


def shell_conductance(inner: float, outer: float, conductivity: float) -> float:
    """Heat that passes a cylindrical shell per metre of pipe and kelvin, 2π·conductivity/ln(outer/inner).

    Parameters
    ----------
    inner, outer : float
        Diameters of the shell, m, 0 < inner < outer.
    conductivity : float
        W/(m·K).

    Returns
    -------
    float
        W/(m·K). Source: Fourier 1822; Incropera and DeWitt, "Fundamentals of Heat and Mass Transfer", section on
        radial systems (cited from memory). The resistances of soil, pipe wall and film are left out.

    Raises
    ------
    ZeroDivisionError
        If the shell has no thickness.

    Examples
    --------
    >>> round(shell_conductance(0.05, 0.05 * math.e, 0.035), 6)
    0.219911
    """
    return 2.0 * math.pi * conductivity / math.log(outer / inner)


def shell_slopes(inner: float, outer: float, conductivity: float) -> tuple[float, float]:
    """Slopes of `shell_conductance` by inner and by outer diameter, each with the other one held.

    Examples
    --------
    >>> by_inner, by_outer = shell_slopes(0.05, 0.05 * math.e, 0.035)
    >>> round(by_inner, 5), round(by_outer, 5)
    (4.39823, -1.61802)
    """
    by_logarithm = -2.0 * math.pi * conductivity / math.log(outer / inner) ** 2
    return -by_logarithm / inner, by_logarithm / outer


def transfer_units(conductance: float, length: float, flow: float, heat_capacity: float) -> float:
    """Exponent N of the temperature drop along a pipe: T_out = T_ground + (T_in - T_ground)·exp(-N).

    Parameters
    ----------
    conductance : float
        W/(m·K).
    length : float
        m.
    flow : float
        Mass flow, kg/s, > 0.
    heat_capacity : float
        kJ/(kg·K).

    Returns
    -------
    float
        Dimensionless. Source: steady flow in a pipe of constant conductance to constant surroundings, Incropera and
        DeWitt, "Fundamentals of Heat and Mass Transfer", chapter on internal flow (cited from memory).

    Examples
    --------
    >>> transfer_units(0.2, 100.0, 0.5, 4.0)
    0.01
    """
    return conductance * 1e-3 * length / (flow * heat_capacity)  # 1e-3: W to kW
