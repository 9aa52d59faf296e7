"""One branch of a heating network that serves four buildings: what it costs, and what arrives at the far end.

ALL DATA OF THE BRANCH ARE INVENTED: lengths, loads, prices, fluid properties and limits describe no real place, network
or product. The formulas are published ones and stand in `heating`.

Two load cases, as in practice. On the design day every building draws the flow that the full spread between supply and
return asks for: explicit formulas. On a summer night loads are small, the fluid cools on its way, and each building's
valve opens until its load is met at the temperature that *arrives*; that temperature depends on all flows and the
flows on all temperatures: an inner iteration, stopped at a tolerance.
"""

import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from gradcheck.demo.heating import (
    friction_factor,
    pressure_loss,
    reynolds,
    shell_conductance,
    transfer_units,
)
from gradcheck.demo.pump_curve import PumpCurve
from gradcheck.records.arrays import Array

# Invented: the four segments, from the plant outwards; building k is served at the end of segment k.
LENGTHS = (120.0, 90.0, 140.0, 80.0)  # m of trench, with a supply and a return pipe
DESIGN_LOADS = (45.0, 30.0, 18.0, 8.0)  # kW on the design day
NIGHT_LOADS = (1.6, 1.1, 0.7, 0.3)  # kW on a summer night

# Invented: a frost-proof mixture of water and glycol, with constant properties.
DENSITY = 1015.0  # kg/m³
VISCOSITY = 1.5e-3  # Pa·s
HEAT_CAPACITY = 3.8  # kJ/(kg·K)

# Invented: pipes, ground and plant.
ROUGHNESS = 7e-6  # m
FITTINGS = 1.15  # bends and valves as a share on top of the straight pipe
CONDUCTIVITY = 0.035  # W/(m·K) of the insulation
GROUND = 10.0  # degC
RETURN = 35.0  # degC
HOTTEST = 100.0  # degC: the inner iteration looks no higher
PUMP_EFFICIENCY = 0.45

# Invented: prices and hours.
ANNUITY = 0.07  # 1/a
TRENCH_PRICE = 60.0  # EUR per m of trench
DIAMETER_PRICE = 1800.0  # EUR per m of trench and m of diameter
INSULATION_PRICE = 800.0  # EUR/m³
PUMP_PRICE = 900.0  # EUR each
HEAT_PRICE = 0.09  # EUR/kWh
POWER_PRICE = 0.30  # EUR/kWh
HOT_HOURS = 8760.0  # h/a
PUMP_HOURS = 6000.0  # h/a

SECONDS_PER_HOUR = 3600.0
PIPES = 2.0  # supply and return

#: What the segments carry on the design day: the loads of all buildings behind them, kW.
CARRIED = tuple(sum(DESIGN_LOADS[k:]) for k in range(4))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Design:
    """The vector of variables by name.

    Attributes
    ----------
    diameters : tuple of 4 floats
        Inner diameters of the segments, m.
    insulation : float
        Thickness, m.
    speed : float
        Pump speed over full speed.
    supply : float
        Supply temperature, degC.
    pumps : float
        Pumps in parallel, before rounding.
    """

    diameters: tuple[float, float, float, float]
    insulation: float
    speed: float
    supply: float
    pumps: float

    @property
    def pump_count(self) -> int:
        """Whole pumps: the model rounds, so that the variable acts in steps."""
        return round(self.pumps)

    @property
    def outers(self) -> tuple[float, ...]:
        """Diameters over the insulation, m: it lies on both sides of the pipe."""
        return tuple(diameter + 2.0 * self.insulation for diameter in self.diameters)

    @property
    def flows(self) -> tuple[float, ...]:
        """Mass flows of the segments on the design day, kg/s."""
        return tuple(load / (HEAT_CAPACITY * (self.supply - RETURN)) for load in CARRIED)


def design_of(x: Any) -> Design:
    """The design behind a vector of shape (8,)."""
    d1, d2, d3, d4, insulation, speed, supply, pumps = np.asarray(x).tolist()
    return Design(diameters=(d1, d2, d3, d4), insulation=insulation, speed=speed, supply=supply, pumps=pumps)


def flow_per_pump(design: Design) -> float:
    """Volume flow through one pump, m³/h, brought to full speed by the affinity law (flow ~ speed)."""
    return SECONDS_PER_HOUR * design.flows[0] / (DENSITY * design.pump_count * design.speed)


def segment_loss(flow: float, diameter: float, length: float) -> float:
    """Pressure loss of supply and return pipe of one segment, kPa; jumps where the friction law changes."""
    friction = friction_factor(reynolds(flow, diameter, VISCOSITY), ROUGHNESS / diameter)
    return 1e-3 * PIPES * FITTINGS * pressure_loss(friction, flow, diameter, length, DENSITY)


def conductances(design: Design) -> tuple[float, ...]:
    """Heat loss of one pipe of each segment per metre and kelvin, W/(m·K)."""
    return tuple(
        shell_conductance(inner, outer, CONDUCTIVITY)
        for inner, outer in zip(design.diameters, design.outers, strict=True)
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Night:
    """The summer night at one guess of the farthest temperature, from building 4 back to building 1 and turned round.

    Attributes
    ----------
    temperatures : list of 4 floats
        Supply temperatures at the buildings, degC.
    draws, flows : list of 4 floats
        Mass flows into the buildings and through the segments, kg/s.
    units : list of 4 floats
        Exponents of the temperature drops along the segments.
    """

    temperatures: list[float]
    draws: list[float]
    flows: list[float]
    units: list[float]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Branch:
    """The model: four functions of the vector x, shape (8,), each finite everywhere inside the scenario's bounds.

    Attributes
    ----------
    pump : PumpCurve
    inner_tolerance : float
        Relative width at which the bisection of the summer night stops. Only `farthest_temperature` feels it.
    """

    pump: PumpCurve
    inner_tolerance: float

    def yearly_cost(self, x: Any) -> float:
        """Yearly cost in EUR/a: annuity of pipes, insulation and pumps, heat losses, pumping energy.

        Heat losses count the pipes at plant temperatures all year, so that no iteration enters here.
        """
        design = design_of(x)
        invested = PUMP_PRICE * design.pump_count
        lost = 0.0
        for length, inner, conductance in zip(LENGTHS, design.diameters, conductances(design), strict=True):
            shell = PIPES * math.pi * design.insulation * (inner + design.insulation)  # m³ per m of trench
            invested += length * (TRENCH_PRICE + DIAMETER_PRICE * inner + INSULATION_PRICE * shell)
            lost += length * conductance * 1e-3
        lost *= design.supply + RETURN - 2.0 * GROUND
        return ANNUITY * invested + HEAT_PRICE * HOT_HOURS * lost + self._pumping_cost(design)

    def pump_head(self, design: Design) -> float:
        """Head in kPa by the affinity law (head ~ speed²); has the kinks of the table."""
        return design.speed**2 * self.pump.head(flow_per_pump(design))

    def pressure_left(self, x: Any) -> float:
        """Differential pressure in kPa that is left at the farthest building on the design day."""
        design = design_of(x)
        left = self.pump_head(design)
        for flow, diameter, length in zip(design.flows, design.diameters, LENGTHS, strict=True):
            left -= segment_loss(flow, diameter, length)
        return left

    def velocities(self, x: Any) -> Array:
        """Flow velocities of the segments on the design day, m/s, shape (4,)."""
        design = design_of(x)
        return np.array(
            [
                4.0 * flow / (math.pi * DENSITY * diameter**2)
                for flow, diameter in zip(design.flows, design.diameters, strict=True)
            ]
        )

    def farthest_temperature(self, x: Any) -> float:
        """Supply temperature in degC at the farthest building on a summer night.

        The flows come from the bisection, the temperature is then followed forwards from the plant: that step repeats
        the bisection's last digits enlarged (about fivefold at the start point), because the valves react strongly.
        """
        design = design_of(x)
        return GROUND + (design.supply - GROUND) * math.exp(-sum(self.night(design).units))

    def night(self, design: Design) -> Night:
        """The summer night, to the inner tolerance."""
        losses = self._losses(design)
        low, high = RETURN, HOTTEST
        while high - low > self.inner_tolerance * high:
            middle = 0.5 * (low + high)
            if _plant_would_be_hotter(middle, losses, design.supply):
                high = middle
            else:
                low = middle
        return _night(0.5 * (low + high), losses)

    def _losses(self, design: Design) -> list[float]:
        """Exponents at a flow of 1 kg/s."""
        return [
            transfer_units(conductance, length, 1.0, HEAT_CAPACITY)
            for conductance, length in zip(conductances(design), LENGTHS, strict=True)
        ]

    def _pumping_cost(self, design: Design) -> float:
        power = design.flows[0] / DENSITY * self.pump_head(design) / PUMP_EFFICIENCY  # m³/s · kPa = kW
        return POWER_PRICE * PUMP_HOURS * power


def _plant_would_be_hotter(farthest: float, losses: list[float], supply: float) -> bool:
    """Whether `farthest` degC at building 4 would need more than `supply` at the plant.

    The temperature only rises on the way back to the plant, so the march may stop at the first one above `supply`:
    this also keeps the exponentials from overflowing at hopeless guesses.
    """
    temperature, flow = farthest, 0.0
    for k in (3, 2, 1, 0):
        flow += NIGHT_LOADS[k] / (HEAT_CAPACITY * (temperature - RETURN))
        temperature = GROUND + (temperature - GROUND) * math.exp(losses[k] / flow)
        if temperature > supply:
            return True
    return False


def _night(farthest: float, losses: list[float]) -> Night:
    temperatures, draws, flows, units = [0.0] * 4, [0.0] * 4, [0.0] * 4, [0.0] * 4
    temperature, flow = farthest, 0.0
    for k in (3, 2, 1, 0):
        temperatures[k] = temperature
        draws[k] = NIGHT_LOADS[k] / (HEAT_CAPACITY * (temperature - RETURN))
        flow += draws[k]
        flows[k] = flow
        units[k] = losses[k] / flow
        temperature = GROUND + (temperature - GROUND) * math.exp(units[k])
    return Night(temperatures=temperatures, draws=draws, flows=flows, units=units)
