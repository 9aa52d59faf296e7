"""Where a line leaves the region in which the model gives finite values."""

from dataclasses import dataclass

import numpy as np

from gradcheck.evaluation.protocol import Status
from gradcheck.health.line_report import Irregularity
from gradcheck.health.line_samples import Line, Quest, Samples
from gradcheck.records.finding import FindingCode

EDGE_WIDTH = 1e-9  # in t
MOST_EDGES = 6  # scattered failures are left at the resolution of the grid


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Run:
    """Neighbouring samples that are all finite, or all not: those from `first` to `last`."""

    finite: bool
    first: int
    last: int


def runs(samples: Samples, output: int) -> list[Run]:
    """The runs of one output along the line."""
    finite = np.isfinite(samples.values[:, output])
    if finite.size == 0:
        return []
    changes = np.flatnonzero(finite[1:] != finite[:-1])
    starts = np.concatenate([[0], changes + 1])
    ends = np.concatenate([changes, [finite.size - 1]])
    return [Run(finite=bool(finite[a]), first=int(a), last=int(b)) for a, b in zip(starts, ends, strict=True)]


def edges_located(samples: Samples, output: int, line: Line) -> Quest[Samples]:
    """Bisect every pair of a finite and a non-finite neighbour."""
    finite = np.isfinite(samples.values[:, output])
    index = np.flatnonzero(finite[1:] != finite[:-1])
    if index.size == 0 or index.size > MOST_EDGES:
        return samples
    left, right = samples.t[index], samples.t[index + 1]
    left_finite = finite[index]
    width = max(EDGE_WIDTH, 8.0 * float(line.grain(np.ones(1))[0]))
    while True:
        wide = right - left > width
        if not wide.any():
            return samples
        samples = yield 0.5 * (left + right)[wide]
        middle, value = samples.at(0.5 * (left + right), output)
        like_left = np.isfinite(value) == left_finite
        left, right = (
            np.where(wide & like_left, middle, left),
            np.where(wide & ~like_left, middle, right),
        )


def stretches(samples: Samples, output: int) -> list[Irregularity]:
    """The runs without finite values, each with its reason and the brackets of its ends."""
    found = []
    for run in runs(samples, output):
        if run.finite:
            continue
        before, after = max(run.first - 1, 0), min(run.last + 1, samples.t.size - 1)
        evidence = {
            "lower_bracket": float(samples.t[run.first] - samples.t[before]),
            "upper_bracket": float(samples.t[after] - samples.t[run.last]),
            "samples": float(run.last - run.first + 1),
        }
        found.append(
            Irregularity(
                kind=_reason(samples, run),
                output=output,
                lower=float(0.5 * (samples.t[run.first] + samples.t[before])),
                upper=float(0.5 * (samples.t[run.last] + samples.t[after])),
                evidence=evidence,
            )
        )
    return found


def _reason(samples: Samples, run: Run) -> FindingCode:
    status = samples.status[run.first : run.last + 1]
    if (status == Status.CRASH).any():
        return FindingCode.CRASH
    if (status == Status.TIMEOUT).any():
        return FindingCode.TIMEOUT
    return FindingCode.NON_FINITE


def finite_stretches(samples: Samples, output: int) -> list[tuple[float, float]]:
    """Ends (lower, upper) of the runs of finite samples."""
    return [(float(samples.t[run.first]), float(samples.t[run.last])) for run in runs(samples, output) if run.finite]
