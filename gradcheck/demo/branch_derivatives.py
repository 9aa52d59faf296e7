"""Derivatives of the branch, written out by hand as an engineer would; one entry is wrong on purpose."""

import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from gradcheck.demo.branch import (
    ANNUITY,
    CONDUCTIVITY,
    DENSITY,
    DIAMETER_PRICE,
    GROUND,
    HEAT_PRICE,
    HOT_HOURS,
    INSULATION_PRICE,
    LENGTHS,
    PIPES,
    POWER_PRICE,
    PUMP_EFFICIENCY,
    PUMP_HOURS,
    RETURN,
    ROUGHNESS,
    VISCOSITY,
    Branch,
    Design,
    Night,
    conductances,
    design_of,
    flow_per_pump,
    segment_loss,
)
from gradcheck.demo.heating import friction_factor, friction_slopes, reynolds, shell_slopes
from gradcheck.records.arrays import Array

# Places in the vector of variables; the diameters are 0 to 3 and the number of pumps (7) acts in steps: slope zero.
INSULATION, SPEED, SUPPLY = 4, 5, 6
SIZE = 8

#: The insulation lies on both sides of the pipe: the outer diameter grows twice as fast as the thickness.
BOTH_SIDES = 2.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class BranchDerivatives:
    """The claims: gradients of shape (8,), and the velocities' Jacobian of shape (4, 8).

    On a kink of the pump table the slope to the right is used, at the friction law's switch the turbulent side.

    Attributes
    ----------
    branch : Branch
    mended : bool
        False: the heat-loss part of the cost's insulation entry lacks the factor `BOTH_SIDES`.
    """

    branch: Branch
    mended: bool

    def yearly_cost(self, x: Any) -> Array:
        """Gradient of `Branch.yearly_cost`, EUR/a per unit of each variable."""
        design = design_of(x)
        gradient = np.zeros(SIZE)
        spread = design.supply + RETURN - 2.0 * GROUND
        price = HEAT_PRICE * HOT_HOURS * 1e-3  # EUR/a for each W lost all year
        # PLANTED MISTAKE: the claim takes the outer diameter to grow as fast as the thickness.
        growth = BOTH_SIDES if self.mended else 1.0
        shells = zip(LENGTHS, design.diameters, design.outers, conductances(design), strict=True)
        for k, (length, inner, outer, conductance) in enumerate(shells):
            by_inner, by_outer = shell_slopes(inner, outer, CONDUCTIVITY)
            filling = INSULATION_PRICE * PIPES * math.pi
            gradient[k] = ANNUITY * length * (DIAMETER_PRICE + filling * design.insulation)
            gradient[k] += price * spread * length * (by_inner + by_outer)
            gradient[INSULATION] += ANNUITY * length * filling * outer
            gradient[INSULATION] += price * spread * length * by_outer * growth
            gradient[SUPPLY] += price * length * conductance
        return gradient + self._pumping_cost(design)

    def _pumping_cost(self, design: Design) -> Array:
        scale = POWER_PRICE * PUMP_HOURS * design.flows[0] / (DENSITY * PUMP_EFFICIENCY)
        gradient = scale * self._pump_head(design)
        gradient[SUPPLY] -= scale * self.branch.pump_head(design) / (design.supply - RETURN)
        return gradient

    def _pump_head(self, design: Design) -> Array:
        """speed²·H(q) with q ~ 1/(speed·(supply - return)); the table gives H' as the slope of its piece."""
        gradient = np.zeros(SIZE)
        flow = flow_per_pump(design)
        lift = self.branch.pump.slope(flow) * flow
        gradient[SPEED] = design.speed * (2.0 * self.branch.pump.head(flow) - lift)
        gradient[SUPPLY] = -(design.speed**2) * lift / (design.supply - RETURN)
        return gradient

    def pressure_left(self, x: Any) -> Array:
        """Gradient of `Branch.pressure_left`, kPa per unit of each variable."""
        design = design_of(x)
        gradient = self._pump_head(design)
        for k, (flow, diameter, length) in enumerate(zip(design.flows, design.diameters, LENGTHS, strict=True)):
            number, roughness = reynolds(flow, diameter, VISCOSITY), ROUGHNESS / diameter
            friction, (by_reynolds, by_roughness) = (
                friction_factor(number, roughness),
                friction_slopes(number, roughness),
            )
            loss = segment_loss(flow, diameter, length)
            # loss ~ friction·flow²/diameter⁵, Re ~ flow/diameter, roughness ~ 1/diameter: logarithmic slopes
            from_reynolds = by_reynolds * number / friction
            from_roughness = by_roughness * roughness / friction
            gradient[k] = loss / diameter * (5.0 + from_reynolds + from_roughness)
            gradient[SUPPLY] += loss * (2.0 + from_reynolds) / (design.supply - RETURN)
        return gradient

    def velocities(self, x: Any) -> Array:
        """Jacobian of `Branch.velocities`, shape (4, 8), m/s per unit of each variable."""
        design = design_of(x)
        jacobian = np.zeros((4, SIZE))
        for k, velocity in enumerate(self.branch.velocities(x)):
            jacobian[k, k] = -2.0 * velocity / design.diameters[k]
            jacobian[k, SUPPLY] = -velocity / (design.supply - RETURN)
        return jacobian

    def farthest_temperature(self, x: Any) -> Array:
        """Gradient of `Branch.farthest_temperature`, K per unit of each variable, by the implicit function theorem.

        The four temperatures T solve R(T, x) = 0; so dT/dx = -(∂R/∂T)⁻¹·∂R/∂x, whatever iteration found them. This is
        the derivative of the *solution*: it holds for the program as far as the inner tolerance lets one see.
        """
        design = design_of(x)
        night = self.branch.night(design)
        every = np.linalg.solve(_night_by_temperatures(night), -_night_by_variables(design, night))
        farthest: Array = every[3]
        return farthest


def _night_by_temperatures(night: Night) -> Array:
    """∂R/∂T, shape (4, 4), of R_k = ln((T_k - ground)/(T_{k-1} - ground)) + N_k, with N_k ~ 1/(flow of segment k)."""
    above = np.array(night.temperatures) - GROUND
    # a warmer arrival at building j lowers its draw, and so the flow of every segment on the way to it
    answer = np.array(night.draws) / (np.array(night.temperatures) - RETURN)
    by_draws = np.triu(np.outer(np.array(night.units) / np.array(night.flows), answer))
    by_ends: Array = np.diag(1.0 / above) - np.diag(1.0 / above[:3], -1)
    return by_ends + by_draws


def _night_by_variables(design: Design, night: Night) -> Array:
    """∂R/∂x, shape (4, 8), at held temperatures."""
    columns = np.zeros((4, SIZE))
    shells = zip(design.diameters, design.outers, conductances(design), strict=True)
    for k, (inner, outer, conductance) in enumerate(shells):
        by_inner, by_outer = shell_slopes(inner, outer, CONDUCTIVITY)
        columns[k, k] = night.units[k] * (by_inner + by_outer) / conductance
        columns[k, INSULATION] = night.units[k] * by_outer * BOTH_SIDES / conductance
    columns[0, SUPPLY] = -1.0 / (design.supply - GROUND)
    return columns
