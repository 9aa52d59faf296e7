"""A pump curve as data sheets give it: a table, read by linear interpolation, with a kink at every knot."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.records.arrays import Array, frozen


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PumpCurve:
    """Head of one pump over its volume flow, both at full speed.

    Attributes
    ----------
    flows : ndarray, shape (k,)
        Knots, m³/h, increasing.
    heads : ndarray, shape (k,)
        kPa. Outside the table the head stays at its end value.
    """

    flows: Array
    heads: Array

    def head(self, flow: float) -> float:
        """Head in kPa at a volume flow in m³/h."""
        return float(np.interp(flow, self.flows, self.heads))

    def slope(self, flow: float) -> float:
        """Slope of the piece on which `flow` lies, kPa per m³/h; at a knot, of the piece to its right."""
        return float(self._slopes()[np.searchsorted(self.flows, flow, side="right")])

    def kinks(self) -> tuple[float, ...]:
        """Volume flows, m³/h, at which the slope really changes."""
        return tuple(self.flows[np.diff(self._slopes()) != 0.0].tolist())

    def _slopes(self) -> Array:
        inner: Array = np.diff(self.heads) / np.diff(self.flows)
        return np.concatenate([[0.0], inner, [0.0]])


def pump_curve(table: Sequence[tuple[float, float]]) -> PumpCurve:
    """The curve through (volume flow in m³/h, head in kPa) pairs.

    Raises
    ------
    UsageError
        If there are fewer than two pairs, a number is not finite, or the flows do not increase.

    Examples
    --------
    >>> pump_curve([(0.0, 80.0), (2.0, 60.0)]).head(1.0)
    70.0
    """
    try:
        pairs = np.array(table, dtype=float)
    except (TypeError, ValueError):
        raise UsageError(f"pump_table is {table!r}; give pairs of numbers (flow in m³/h, head in kPa)") from None
    if pairs.ndim != 2 or pairs.shape[1] != 2 or len(pairs) < 2:
        raise UsageError(
            f"pump_table has shape {pairs.shape}; a line needs at least two (flow in m³/h, head in kPa) pairs"
        )
    if not np.isfinite(pairs).all():
        raise UsageError(f"pump_table holds {pairs[~np.isfinite(pairs)][0]}; every flow and head must be finite")
    flows, heads = pairs.T
    back = np.flatnonzero(np.diff(flows) <= 0.0)
    if back.size:
        i = int(back[0])
        raise UsageError(
            f"pump_table goes from flow {flows[i]:g} to {flows[i + 1]:g}; sort the pairs so that the flows increase"
        )
    return PumpCurve(flows=frozen(flows), heads=frozen(heads))
