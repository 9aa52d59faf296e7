"""The options of the command ``gradcheck``, each defined once, and the exit statuses as its help tells them."""

from collections.abc import Callable
from typing import Any

import click

STATUSES = """\b
Exit status:
  0    ready: no blocker, nothing refuted, nothing undecided
  1    a claim refuted, or a blocker found
  2    the command could not be carried out: one line says why
  3    the model could not be evaluated at its start point
  4    nothing refuted, but a claim undecided or the audit incomplete
       (--allow-undecided makes it 0)
  70   an error of gradcheck itself: never a verdict
  130  interrupted; what was found so far is printed
"""

_OPTION = {
    "model": click.argument("model"),
    "at": click.option("--at", metavar="POINT", help="Where: numbers separated by commas, or JSON."),
    "lower": click.option("--lower", metavar="NUMBERS", help="Lower bounds; one number for all, none for no bound."),
    "upper": click.option("--upper", metavar="NUMBERS", help="Upper bounds."),
    "gradient": click.option(
        "--gradient", metavar="ADDRESS", help="The claim: an address, a name in MODEL's module, jax or autograd."
    ),
    "jacobian": click.option("--jacobian", metavar="ADDRESS", help="The same, for a model with several outputs."),
    "samples": click.option(
        "--samples", type=click.IntRange(min=0), default=0, metavar="N", help="How many more points within the bounds."
    ),
    "points": click.option(
        "--points", metavar="FILE", help="More points, one per row: .csv, .txt, .json or .npy (a solver's iterates)."
    ),
    "along": click.option("--along", metavar="NAME", default="0", help="Name or index of the variable; default 0."),
    "budget": click.option(
        "--budget", type=click.IntRange(min=1), metavar="N", help="At most this many evaluations of the model."
    ),
    "time_limit": click.option("--time-limit", metavar="TIME", help="At most this long: seconds, or 90s, 10min, 2h."),
    "seed": click.option(
        "--seed", type=click.IntRange(0), default=0, show_default=True, help="Of everything that is random."
    ),
    "json": click.option("--json", metavar="FILE", help="Write the report as JSON; - is standard output."),
    "svg": click.option("--svg", metavar="FILE", help="Draw the curve as SVG; - is standard output."),
    "quiet": click.option("--quiet", is_flag=True, help="No progress; one line if there is nothing to complain of."),
    "allow_undecided": click.option("--allow-undecided", is_flag=True, help="Exit with 0 instead of 4."),
}
#: Options that say what is looked at, and under which conditions.
WHERE = ("model", "at", "lower", "upper")
HOW = ("budget", "time_limit", "seed", "json", "quiet")


def options(*names: str) -> Callable[[Callable[..., Any]], Callable[..., Any]]:
    """The named options, in this order, as one decorator."""

    def decorate(function: Callable[..., Any]) -> Callable[..., Any]:
        for name in reversed(names):
            function = _OPTION[name](function)
        return function

    return decorate
