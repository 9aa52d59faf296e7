"""``python -m benchmarks``: every measurement, each figure beside its goal."""

import importlib
import sys
import time

import click

# each has a QUESTION and a function run(points, seed) that returns its report as text
BENCHMARKS = (
    "estimator",
    "second_derivatives",
    "noise",
    "scan",
    "solver_steps",
    "verdicts",
    "slight_errors",
    "mistakes",
    "products",
    "rules",
    "large",
    "repeated_seeds",
    "cost",
    "nested",
    "sparse",
)


@click.command()
@click.option("--points", default=20, show_default=True, type=click.IntRange(min=1), help="Points per function.")
@click.option("--only", type=click.Choice(BENCHMARKS), help="One benchmark instead of all.")
@click.option("--seed", default=0, show_default=True, help="Seed of the random points.")
def main(points: int, only: str | None, seed: int) -> None:
    """Measure the library; an exclamation mark stands at every figure that misses its goal."""
    for name in (only,) if only else BENCHMARKS:
        benchmark = importlib.import_module(f"benchmarks.{name}")
        print(f"{name}: {benchmark.QUESTION}\n")
        started = time.perf_counter()
        print(benchmark.run(points, seed))
        print(f"\n{points} points a function, seed {seed}, {time.perf_counter() - started:.1f} s\n", flush=True)


if __name__ == "__main__":
    sys.exit(main(prog_name="python -m benchmarks"))
