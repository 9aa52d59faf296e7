"""Steps for the user's own solver: forward and central differences, and the error each leaves.

Forward: h = 8^(1/4)·sqrt(ε/|f''|) (Moré & Wild 2012, for noise of standard deviation ε). Central: h = (3ε/|f'''|)^(1/3)
(Gill, Murray, Saunders & Wright 1983).
"""

import numpy as np

from gradcheck.records.arrays import Array
from gradcheck.records.noise import NoiseKind
from gradcheck.records.report import Steps

#: A step is never larger than this share of the variable's size: the curvature is only known near the point.
LARGEST = 0.1


def solver_steps(
    function: str,
    names: tuple[str, ...],
    noise: float,
    second: Array,
    third: Array,
    sizes: Array,
    noise_kind: NoiseKind = NoiseKind.NOT_EXAMINED,
) -> Steps:
    """Best steps per variable.

    Parameters
    ----------
    function : str
    names : tuple of str
    noise : float
        Standard deviation ε of one value.
    second, third : ndarray, shape (n,)
        Second and third derivative along each variable; NaN where unknown.
    sizes : ndarray, shape (n,)
        Sizes of the variables.
    noise_kind : NoiseKind
        Passed on.

    Returns
    -------
    Steps
        Where a derivative is zero or unknown the formula gives no step; the largest sensible one is returned then, and
        the error is what noise leaves.
    """
    largest = LARGEST * sizes
    bend, twist = np.abs(np.nan_to_num(second)), np.abs(np.nan_to_num(third))
    with np.errstate(divide="ignore"):
        forward = np.minimum(8**0.25 * np.sqrt(noise / bend), largest)
        central = np.minimum(np.cbrt(3 * noise / twist), largest)
    return Steps(
        function=function,
        names=names,
        forward=forward,
        # Truncation and two noisy values; at the best step both parts are of one size.
        forward_error=bend * forward / 2 + np.sqrt(2) * noise / forward,
        central=central,
        central_error=twist * central**2 / 6 + noise / (np.sqrt(2) * central),
        noise=noise,
        noise_kind=noise_kind,
    )
