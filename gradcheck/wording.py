"""Numbers, units, verdicts and codes as words: the only place that formats.

Everything here is pure, takes builtin values and returns one line of plain text, so that a number looks the same in a
failure message, in a report and on a page.
"""

import math
import reprlib
from collections.abc import Collection, Iterable, Iterator, Sequence

from gradcheck.records.advice import Family
from gradcheck.records.finding import FindingCode, Severity
from gradcheck.records.noise import NoiseKind
from gradcheck.records.verdict import DiagnosisCode

#: More digits than this say nothing in double precision.
MOST_DIGITS = 17

#: Digits of a value that stands beside a bound, at most: beyond these a table becomes unreadable.
_DIGITS_BESIDE_BOUND = 10

#: Relative width of a bracket below which its two ends would look the same.
_NARROW = 1e-4

#: A part of a name is not cut to fewer characters than these.
_LEAST_PART = 6

SEVERITY_WORDS: dict[Severity, str] = {
    Severity.BLOCKER: "optimizing now wastes the run",
    Severity.HAZARD: "works, but badly or only in places",
    Severity.REMARK: "good to know",
}

FAMILY_WORDS: dict[Family, str] = {
    Family.GRADIENT_BASED: "a gradient-based solver",
    Family.GRADIENT_FREE: "a gradient-free solver",
}

FINDING_WORDS: dict[FindingCode, str] = {
    FindingCode.CLAIM_REFUTED: "a claimed derivative is wrong",
    FindingCode.CLAIM_UNDECIDED: "a claimed derivative could not be judged",
    FindingCode.WITNESS_CONFLICT: "two witnesses contradict each other",
    FindingCode.KINK: "the slope jumps",
    FindingCode.JUMP: "the value jumps",
    FindingCode.STAIRCASE: "flat steps with jumps between them",
    FindingCode.CURVATURE_BREAK: "the curvature jumps",
    FindingCode.NOISE: "the value is noisy",
    FindingCode.LOW_PRECISION: "single precision inside",
    FindingCode.COARSE_OUTPUT: "the output has few digits",
    FindingCode.TOLERANCE_DRIFT: "the derivative drifts with the model's own tolerance",
    FindingCode.UNREPEATABLE: "the same point gives different values",
    FindingCode.NON_FINITE: "NaN or infinity within the bounds",
    FindingCode.CRASH: "the model or its derivative fails",
    FindingCode.TIMEOUT: "the model takes too long",
    FindingCode.BOUND_CROSSED: "the model was called outside its bounds",
    FindingCode.DEAD_VARIABLE: "a variable has no effect",
    FindingCode.SCALE_SPREAD: "effects of very different size",
    FindingCode.ILL_CONDITIONED: "badly conditioned",
    FindingCode.DEPENDENT_CONSTRAINTS: "constraints depend on each other",
    FindingCode.MANY_BASINS: "several basins",
    FindingCode.INTEGER_VARIABLE: "an integer variable",
    FindingCode.MUTATES_INPUT: "the model writes into its input",
    FindingCode.COMPLEX_UNSAFE: "the complex step is not safe here",
    FindingCode.INTEGER_ARITHMETIC: "integer arithmetic inside",
    FindingCode.SLOW_DERIVATIVE: "the derivative is slow",
}

NOISE_WORDS: dict[NoiseKind, str] = {
    NoiseKind.ROUNDING: "rounding",
    NoiseKind.SINGLE_PRECISION: "single precision inside",
    NoiseKind.INNER_TOLERANCE: "an inner tolerance",
    NoiseKind.FEW_DIGITS: "few digits",
    NoiseKind.UNREPEATABLE: "differs from call to call",
    NoiseKind.NOT_EXAMINED: "",
}

DIAGNOSIS_WORDS: dict[DiagnosisCode, str] = {
    DiagnosisCode.SIGN_FLIPPED: "the sign is flipped",
    DiagnosisCode.CONSTANT_FACTOR: "off by a constant factor",
    DiagnosisCode.ZERO_ENTRY: "an entry is left at zero",
    DiagnosisCode.SWAPPED_ENTRIES: "entries are swapped",
    DiagnosisCode.SHIFTED_ENTRIES: "entries are shifted",
    DiagnosisCode.TRANSPOSED: "the matrix is transposed",
    DiagnosisCode.REORDERED: "rows and columns are laid out in the other order",
    DiagnosisCode.DEGREES_FOR_RADIANS: "degrees taken for radians, or the reverse",
    DiagnosisCode.UNIT_FACTOR: "a unit is not converted",
    DiagnosisCode.MEAN_FOR_SUM: "a mean where the model has a sum, or the reverse",
    DiagnosisCode.MISSING_CHAIN_RULE: "a factor of the chain rule is missing",
    DiagnosisCode.MISSING_PATH: "a term of the derivative is missing",
    DiagnosisCode.IGNORES_COTANGENT: "the rule ignores the incoming cotangent",
    DiagnosisCode.STALE_POINT: "the derivative of an earlier point",
    DiagnosisCode.SINGLE_PRECISION: "computed in single precision",
    DiagnosisCode.REGION_ONLY: "right in one region only",
    DiagnosisCode.UNKNOWN: "none of the usual ones",
}


def number(value: float, digits: int = 4) -> str:
    """`value` to at most `digits` significant digits, trailing zeros dropped; ``nan``, ``inf`` and ``-inf`` as such.

    Whole numbers below a million are written out in full, very large and very small values with a power of ten.

    Examples
    --------
    >>> number(1234.5678), number(0.00001234), number(-0.0), number(float("nan"))
    ('1235', '1.234e-5', '0', 'nan')
    """
    value = float(value)
    if not math.isfinite(value):
        return str(value)
    if abs(value) < 1e6 and value == int(value):
        return str(int(value))
    digits = max(1, min(digits, MOST_DIGITS))
    mantissa, _, exponent = f"{value:.{digits - 1}e}".partition("e")
    power = int(exponent)
    if not -3 <= power < 6:
        return f"{_without_zeros(mantissa)}e{power}"
    return _without_zeros(f"{value:.{max(0, digits - 1 - power)}f}")


def _without_zeros(text: str) -> str:
    return text.rstrip("0").rstrip(".") if "." in text else text


def with_bound(value: float, bound: float, digits: int = _DIGITS_BESIDE_BOUND) -> str:
    """``value ± bound``: the value to the second digit that the bound leaves in doubt, but at most `digits`.

    Examples
    --------
    >>> with_bound(3.14159265, 2.2e-4), with_bound(1.5, float("inf")), with_bound(float("nan"), float("inf"))
    ('3.14159 ± 2.2e-4', '1.5 ± inf', 'nan ± inf')
    """
    return f"{number(value, _digits_worth(value, bound, digits))} ± {number(bound, 2)}"


def _digits_worth(value: float, bound: float, most: int) -> int:
    """Digits of `value` down to the second one of `bound`; two at least, so that small values are still seen."""
    if value == 0.0 or bound == 0.0 or not (math.isfinite(value) and math.isfinite(bound)):
        return most
    decades = math.floor(math.log10(abs(value))) - math.floor(math.log10(abs(bound)))
    return max(2, min(decades + 2, most))


def digits_to_tell_apart(agreed: float) -> int:
    """Significant digits at which two numbers that agree to `agreed` digits look different: two more, at least four."""
    if not math.isfinite(agreed):
        return 4
    return int(max(4, min(math.floor(agreed) + 3, MOST_DIGITS)))


def agreed_digits(digits: float) -> str:
    """Digits seen to agree, as a word for a table: whole ones, ``-`` where unknown, ``all`` where nothing differs."""
    if math.isnan(digits):
        return "-"
    if digits <= 0.0:
        return "0"
    return "all" if math.isinf(digits) else str(math.floor(digits))


def count(amount: int, noun: str, plural: str = "") -> str:
    """``1 entry``, ``1,200,000 entries``.

    Examples
    --------
    >>> count(1, "evaluation"), count(1200000, "entry", "entries"), count(0, "blocker")
    ('1 evaluation', '1,200,000 entries', 'no blockers')
    """
    word = noun if amount == 1 else plural or f"{noun}s"
    return f"{amount:,} {word}" if amount else f"no {word}"


def seconds(duration: float) -> str:
    """A duration in the unit that a person would use.

    Examples
    --------
    >>> seconds(0.00002), seconds(0.0123), seconds(4.25), seconds(250), seconds(7500)
    ('under 1 ms', '12 ms', '4.2 s', '4 min 10 s', '2 h 5 min')
    """
    if not math.isfinite(duration):
        return "unknown time"
    if duration < 1e-3:
        return "under 1 ms"
    if duration < 1.0:
        return f"{duration * 1e3:.0f} ms"
    if duration < 60.0:
        return f"{duration:.1f} s"
    whole = round(duration)
    if whole < 3600:
        return f"{whole // 60} min {whole % 60} s"
    return f"{whole // 3600:,} h {whole % 3600 // 60} min"


def cost(evaluations: int, duration: float) -> str:
    """``18 evaluations in 2.0 s``."""
    return f"{count(evaluations, 'evaluation')} in {seconds(duration)}"


def noise(levels: Sequence[float], kinds: Iterable[NoiseKind] = ()) -> str:
    """The noise of one or several outputs, and where it comes from; empty if no level is known.

    Examples
    --------
    >>> noise([2.2e-16], [NoiseKind.ROUNDING]), noise([1e-7, 1e-3])
    ('noise of the value: 2.2e-16 (rounding)', 'noise of the value: 1e-7 to 1e-3')
    """
    known = [level for level in levels if math.isfinite(level)]
    if not known:
        return ""
    low, high = number(min(known), 2), number(max(known), 2)
    words = [word for word in dict.fromkeys(NOISE_WORDS[kind] for kind in kinds) if word]
    return f"noise of the value: {low if low == high else f'{low} to {high}'}{f' ({listed(words)})' if words else ''}"


def listed(names: Sequence[str], limit: int = 6, width: int = 40) -> str:
    """Names as a list, cut after `limit` with how many more there are; each in at most `width` characters.

    Examples
    --------
    >>> listed(["a"]), listed(["a", "b", "c"]), listed(["a", "b", "c", "d"], limit=2), listed([])
    ('a', 'a, b and c', 'a, b and 2 more', 'none')
    """
    shown = shortened_apart(names[:limit], width)
    if not shown:
        return "none"
    if len(names) > len(shown):
        return f"{', '.join(shown)} and {len(names) - len(shown):,} more"
    return shown[0] if len(shown) == 1 else f"{', '.join(shown[:-1])} and {shown[-1]}"


def tally(words: Iterable[str]) -> str:
    """How often each word occurs, in order of first occurrence: ``3 refuted, 1,200 confirmed``."""
    amounts: dict[str, int] = {}
    for word in words:
        amounts[word] = amounts.get(word, 0) + 1
    return ", ".join(f"{amount:,} {word}" for word, amount in amounts.items())


def point(values: Sequence[float], limit: int = 6) -> str:
    """A point in brackets, cut after `limit` entries.

    Examples
    --------
    >>> point([0.3, 1.2]), point([1.0] * 100, limit=2)
    ('(0.3, 1.2)', '(1, 1, ... 98 more)')
    """
    shown = ", ".join(number(value, 6) for value in values[:limit])
    return f"({shown}, ... {len(values) - limit:,} more)" if len(values) > limit else f"({shown})"


def bracket(lower: float, upper: float, unit: str = "") -> str:
    """Where something lies: ``between 1.2 and 1.3``, or ``at 1.2 ± 1e-11`` where the ends would look the same.

    Examples
    --------
    >>> bracket(1.2, 1.3, "m"), bracket(2.0 - 1e-9, 2.0 + 1e-9)
    ('between 1.2 and 1.3 m', 'at 2 ± 1e-9')
    """
    label = f" {clean(unit)}" if unit else ""
    middle, half = lower + (upper - lower) / 2, abs(upper - lower) / 2
    if math.isfinite(half) and half <= _NARROW * max(abs(lower), abs(upper)):
        return f"at {with_bound(middle, half)}{label}"
    return f"between {number(lower)} and {number(upper)}{label}"


def shortened(name: str, width: int) -> str:
    """`name` in at most `width` characters, cut in the middle: beginnings tell the part, ends tell the index.

    Examples
    --------
    >>> shortened("fuselage.frame[120].thickness", 16), shortened("span", 16)
    ('fuselag..ickness', 'span')
    """
    name = clean(name)
    if len(name) <= width:
        return name
    if width < 4:
        return name[: max(width, 0)]
    head = (width - 2) // 2
    tail = width - 2 - head
    return f"{name[:head]}..{name[-tail:]}"


def ends_kept(name: str, width: int) -> str:
    """`name` in at most `width` characters; where it says "by" or "@ point", each part keeps its own end.

    Examples
    --------
    >>> ends_kept("dynamic_defects[5] by initial_velocity[52] @ point 1", 36)
    'dyna..ts[5] by init..y[52] @ point 1'
    """
    name = clean(name)
    if len(name) <= width:
        return name
    head, at, point = name.rpartition(" @ point ")
    tail = f"{at}{point}"
    parts = (head if at else name).split(" by ")
    tail = tail if at else ""
    room = (width - len(tail) - len(" by ") * (len(parts) - 1)) // len(parts)
    if room < _LEAST_PART:
        return shortened(" by ".join(parts), width - len(tail)) + tail
    return " by ".join(shortened(part, room) for part in parts) + tail


def shortened_end(text: str, width: int) -> str:
    """`text` in at most `width` characters, cut at its end."""
    text = clean(text)
    return text if len(text) <= width else f"{text[: width - 3]}..."


def shortened_apart(names: Sequence[str], width: int) -> list[str]:
    """Each name in at most `width` characters, such that different ones still look different where that is possible.

    Names that only differ in the middle would all look alike if they were cut there; then what they have in common at
    both ends gives way.

    Examples
    --------
    >>> shortened_apart(["fuselage.frame[3].thickness", "fuselage.frame[4].thickness"], 13)
    ['fus..[3]..ess', 'fus..[4]..ess']
    """
    names = [clean(name) for name in names]
    groups: dict[str, set[str]] = {}
    for name in names:
        groups.setdefault(shortened(name, width), set()).add(name)
    apart = {name: text for text, group in groups.items() for name, text in _told_apart(text, group, width)}
    return [apart[name] for name in names]


def _told_apart(text: str, group: set[str], width: int) -> Iterator[tuple[str, str]]:
    """Each name of a group that shortens to the same text, with a text of its own."""
    if len(group) == 1:
        yield from ((name, text) for name in group)
        return
    head = _length_in_common(group)
    tail = min(_length_in_common([name[::-1] for name in group]), min(map(len, group)) - head)
    for name in group:
        # One character more on each side, so that an index keeps its brackets.
        yield name, _around_middle(name, max(head - 1, 0), max(tail - 1, 0), width)


def _length_in_common(names: Collection[str]) -> int:
    """How many characters all names begin with."""
    # The first and the last in the order of the alphabet differ soonest.
    first, last = min(names), max(names)
    return next((i for i, (a, b) in enumerate(zip(first, last, strict=False)) if a != b), min(len(first), len(last)))


def _around_middle(name: str, head: int, tail: int, width: int) -> str:
    """The part of `name` between its first `head` and last `tail` characters, with what fits of both ends."""
    middle = name[head : len(name) - tail]
    ends = width - len(middle) - 4
    if len(name) <= width or ends < 2:
        return shortened(name if len(name) <= width else middle, width)
    front = ends - ends // 2
    return f"{name[:front]}..{middle}..{name[len(name) - ends // 2 :]}"


def brief(value: object) -> str:
    """What Python shows of a value, in about 80 characters; large and deep nestings are not shown as a whole.

    Examples
    --------
    >>> brief({"a": 1.0}), brief(list(range(100)))
    ("{'a': 1.0}", '[0, 1, 2, 3, 4, 5, ...]')
    """
    shown = reprlib.Repr()
    shown.maxstring = shown.maxother = 80
    return f"{shown.repr(value):.80}"


def clean(text: str) -> str:
    """`text` in one line without control characters, so that a model's message cannot disturb a terminal or a log."""
    return " ".join("".join(letter if letter.isprintable() else " " for letter in str(text)).split())


def capitalised(text: str) -> str:
    """`text` with a capital first letter, the rest as it is."""
    return text[:1].upper() + text[1:]
