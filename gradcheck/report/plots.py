"""The step-size curve as a picture: a complete SVG document.

matplotlib draws (the extra ``report``). It is imported when a picture is asked for, through its object interface and
its SVG backend alone: no pyplot, no global settings, and every style stated here, so that neither the user's settings
change the picture nor the picture the user's settings. Marks and line styles differ besides colours: the picture is
read in grey as well. Text is drawn as outlines, the same on every machine; what it says stands in ``<title>`` and
``<desc>`` too, for screen readers and searches.
"""

import hashlib
import io
import math
import re
from typing import Any
from xml.sax.saxutils import escape, quoteattr

import numpy as np

from gradcheck import wording
from gradcheck.errors import MissingExtra
from gradcheck.records.arrays import BoolArray
from gradcheck.records.estimate import Branch, Scan
from gradcheck.report.scan_text import error_left

#: Width and height in inches of 72 points.
SIZE = (7.6, 5.2)
#: The font comes with matplotlib.
FONT = "DejaVu Sans"
INK, SOFT, RISING, FALLING, CHOSEN = "#1b1b1b", "#6f6f6f", "#b3450f", "#1f5f99", "#1b1b1b"
#: How many powers of ten below the smallest error the reference's bound may lie and still be shown.
BAND_REACH = 3.0
#: How many powers of ten a branch is drawn beyond the errors that follow it.
BEYOND = 0.6


def scan_svg(scan: Scan) -> str:
    """The scan as an SVG document.

    Parameters
    ----------
    scan : Scan

    Returns
    -------
    str
        The same text for the same record. Errors that are not finite are counted, errors of zero stand as triangles at
        the lower edge; where there is no curve, the picture says so in words.

    Raises
    ------
    MissingExtra
        If matplotlib is not installed.
    """
    title, below = headline(scan), subtitle(scan)
    description = " ".join([below, *remarks(scan)])
    return standalone(_drawn(scan, title, below), title, description)


# --- words ----------------------------------------------------------------------------------------------------------


def headline(scan: Scan) -> str:
    """What was found, in one line."""
    name = f"{wording.shortened(scan.function or 'derivative', 24)} along {wording.shortened(scan.along, 18)}"
    if _exact(scan):
        return f"{name}: every step is exact"
    if not math.isfinite(scan.best_step) and np.isfinite(scan.errors).any():
        return f"{name}: no step gives a derivative"
    if not drawable(scan).any():
        return f"{name}: no curve to draw"
    return f"{name}: best step {wording.number(scan.best_step, 2)}{_unit(scan)}"


def subtitle(scan: Scan) -> str:
    """What the best step leaves, and what the derivative is."""
    value = f"the derivative is {wording.with_bound(scan.value, scan.bound)}"
    if _exact(scan):
        return f"No quotient differs from the others: {value}."
    if not drawable(scan).any():
        return "Fewer than two steps have a finite error above zero."
    if not math.isfinite(scan.best_step):
        reason = wording.capitalised(wording.shortened(scan.notices[-1], 90)) if scan.notices else ""
        return f"{reason or 'The quotients approach no derivative as the step shrinks'}."
    left = error_left(scan)
    share = f" (relative {wording.number(left / abs(scan.value), 2)})" if scan.value else ""
    return f"It leaves an error of about {wording.number(left, 2)}{share} in a {scan.formula}; {value}."


def _referred(scan: Scan) -> bool:
    """Whether errors are distances to a reference; else they are changes from step to step."""
    return math.isfinite(scan.bound)


def _exact(scan: Scan) -> bool:
    """Whether no step shows any error."""
    known = scan.errors[np.isfinite(scan.errors)]
    return known.size > 1 and not known.any() and math.isfinite(scan.best_step)


def remarks(scan: Scan) -> list[str]:
    """What else the curve shows, a sentence each."""
    told = []
    if scan.truncation is not None:
        told.append(
            f"Truncation rules from a step of {wording.number(scan.truncation.lower, 2)} up: "
            f"the error grows with power {wording.number(scan.truncation.slope, 2)} of the step."
        )
    if scan.roundoff is not None:
        told.append(
            f"Noise and rounding rule below a step of {wording.number(scan.roundoff.upper, 2)}: "
            f"the error grows with power {wording.number(scan.roundoff.slope, 2)} of the step."
        )
    if math.isfinite(scan.noise):
        told.append(f"Noise of one value: {wording.number(scan.noise, 2)}.")
    missing = int((~np.isfinite(scan.errors)).sum())
    if missing:
        told.append(f"Not drawn: {wording.count(missing, 'step')} without a finite error.")
    return told + [wording.capitalised(wording.clean(notice)).rstrip(".") + "." for notice in scan.notices]


def _unit(scan: Scan) -> str:
    return f" {wording.shortened(scan.unit, 12)}" if scan.unit else ""


def drawable(scan: Scan) -> BoolArray:
    """(k,): points of the curve; none at all if fewer than two lie above zero."""
    known: BoolArray = np.isfinite(scan.errors) & (scan.steps > 0) & np.isfinite(scan.steps) & (scan.errors >= 0)
    if (known & (scan.errors > 0)).sum() < 2:
        return np.zeros_like(known)
    return known


# --- drawing --------------------------------------------------------------------------------------------------------


def _drawn(scan: Scan, title: str, below: str) -> str:
    """The picture as matplotlib writes it."""
    try:
        from matplotlib.backends.backend_svg import FigureCanvasSVG
        from matplotlib.figure import Figure
    except ImportError:
        raise MissingExtra("a picture of a scan", "matplotlib", "report") from None
    drawn = bool(drawable(scan).any())
    width, height = SIZE if drawn else (SIZE[0], 1.3)
    figure = Figure(figsize=(width, height), dpi=72, facecolor="white", edgecolor="white")
    figure.set_layout_engine("none")

    def write(down: float, text: str, size: float, weight: str = "normal") -> None:
        figure.text(0.02, 1 - down / height, drawable_text(text), fontsize=size, fontweight=weight, color=INK, va="top")

    write(0.12, title, 13.5, "bold")
    write(0.38, below, 8.8)
    if drawn:
        _curve(scan, figure.add_axes((0.115, 0.105, 0.865, 0.665)))
    else:
        write(0.62, "\n".join(wording.shortened(remark, 110) for remark in remarks(scan)[:4]), 8.8)
    _plainly_styled(figure)
    written = io.StringIO()
    # No date, no version: the same record gives the same picture.
    FigureCanvasSVG(figure).print_svg(  # type: ignore[no-untyped-call]
        written, metadata={"Date": None, "Creator": None, "Format": None, "Type": None}
    )
    return written.getvalue()


def _curve(scan: Scan, axes: Any) -> None:
    known = drawable(scan)
    above = known & (scan.errors > 0)
    low, high = _limits(scan, above)
    left, right = scan.steps[known].min() / 1.6, scan.steps[known].max() * 1.6
    axes.set_xscale("log")
    axes.set_yscale("log")
    axes.set_xlim(left, right)
    axes.set_ylim(low, high)
    axes.plot(
        scan.steps[above],
        scan.errors[above],
        linestyle="none",
        marker="o",
        markersize=4.2,
        markerfacecolor="white",
        markeredgecolor=INK,
        markeredgewidth=0.9,
        label=f"error of the {scan.formula}" if _referred(scan) else "change of the quotient from step to step",
        zorder=3,
    )
    _branch(axes, scan, scan.roundoff, "noise and rounding", FALLING, (0, (7, 2, 1.5, 2)))
    _branch(axes, scan, scan.truncation, "truncation", RISING, (0, (6, 2.5)))
    exact = known & ~above
    if exact.any():
        at = np.full(int(exact.sum()), low * (high / low) ** 0.012)
        axes.plot(scan.steps[exact], at, linestyle="none", marker="v", markersize=4, color=SOFT, label="none seen")
    if low < scan.floor < high:
        words = "left by noise at the best step" if math.isfinite(scan.best_step) else "half the change of the slope"
        label = f"floor: {words}, {wording.number(scan.floor, 2)}"
        axes.axhline(scan.floor, color=SOFT, linewidth=1.2, linestyle=(0, (1, 2)), label=label, zorder=1)
    if low < scan.bound < high and math.isfinite(scan.best_step):
        label = f"not resolved: within the bound {wording.number(scan.bound, 2)}"
        axes.axhspan(low, scan.bound, facecolor="#e9e9e9", edgecolor="#b9b9b9", hatch="///", linewidth=0, label=label)
    if math.isfinite(scan.best_step):
        _best(axes, scan, low, high)
    _frame(axes, scan, (left, right), (low, high))


def _limits(scan: Scan, above: BoolArray) -> tuple[float, float]:
    """Lower and upper end of the error axis: all errors, and the reference's bound unless it lies far below them."""
    least, most = float(scan.errors[above].min()), float(scan.errors[above].max())
    low, high = math.log10(least), math.log10(most)
    if math.isfinite(scan.bound) and scan.bound > 0:
        bound = math.log10(scan.bound)
        if low - BAND_REACH <= bound < low:
            low = bound
    # Room below for the best step in words.
    stretch = max(high - low, 1.0)
    return 10 ** (low - 0.13 * stretch), 10 ** (high + 0.05 * stretch)


def _branch(axes: Any, scan: Scan, branch: Branch | None, name: str, colour: str, dashes: Any) -> None:
    if branch is None:
        return
    ends = np.array([branch.lower / 10**BEYOND, branch.upper * 10**BEYOND])
    ends = np.clip(ends, scan.steps.min(), scan.steps.max())
    if branch.slope > 0:
        ends[0] = max(ends[0], min(scan.best_step, branch.lower))
    with np.errstate(over="ignore", under="ignore"):
        line = branch.level * ends**branch.slope
    power = wording.number(branch.slope, 2).replace("-", "\N{MINUS SIGN}")
    axes.plot(
        ends, line, color=colour, linewidth=2.2, linestyle=dashes, label=f"{name}: step to the power {power}", zorder=2
    )


def _best(axes: Any, scan: Scan, low: float, high: float) -> None:
    """The best step and its error."""
    step, error = scan.best_step, scan.best_error
    error = min(max(error, low), high) if error > 0 else low * (high / low) ** 0.012
    axes.plot([step, step], [low, error], color=CHOSEN, linewidth=1.6, zorder=4)
    axes.plot(
        [step],
        [error],
        linestyle="none",
        marker="D",
        markersize=9,
        markerfacecolor=CHOSEN,
        markeredgecolor="white",
        markeredgewidth=1.2,
        zorder=5,
    )
    first, last = (math.log10(end) for end in axes.get_xlim())
    place = (math.log10(step) - first) / (last - first)
    axes.annotate(
        drawable_text(f"take {wording.number(step, 2)}{_unit(scan)}"),
        (step, low * (high / low) ** 0.03),
        xytext=(7 if place < 0.75 else -7, 0),
        textcoords="offset points",
        ha="left" if place < 0.75 else "right",
        va="bottom",
        fontsize=12,
        fontweight="bold",
        color=CHOSEN,
        bbox={"boxstyle": "square,pad=0.15", "facecolor": "white", "edgecolor": "none"},
        zorder=6,
    )


def _frame(axes: Any, scan: Scan, across: tuple[float, float], up: tuple[float, float]) -> None:
    """Axes in words, powers of ten as in the text of a scan, and the explanations in the empty part above the curve."""
    unit = wording.shortened(scan.unit, 12) if scan.unit else "units of the variable"
    name = wording.shortened(scan.along, 24)
    axes.set_xlabel(drawable_text(f"step of {name}, in {unit}"), fontsize=10, color=INK)
    what = "error of the derivative, absolute" if _referred(scan) else "change of the quotient"
    axes.set_ylabel(what, fontsize=10, color=INK)
    for axis, (low, high), most in ((axes.xaxis, across, 9), (axes.yaxis, up, 9)):
        powers = _powers(low, high, most)
        axis.set_ticks([10.0**power for power in powers], labels=[f"1e{power}" for power in powers])
        axis.set_ticks([], minor=True)
    axes.set_facecolor("white")
    axes.tick_params(axis="both", labelsize=9, color=SOFT, labelcolor=INK, width=0.8, length=3.5, direction="out")
    axes.tick_params(axis="both", which="both", top=False, right=False, labeltop=False, labelright=False)
    axes.grid(True, color="#dcdcdc", linewidth=0.6, linestyle="-", zorder=0)
    axes.set_axisbelow(True)
    for side, spine in axes.spines.items():
        spine.set_visible(side in ("left", "bottom"))
        spine.set_color(SOFT)
        spine.set_linewidth(0.8)
    # Above the field, where it hides nothing whatever the curve looks like.
    axes.legend(
        loc="lower left",
        bbox_to_anchor=(-0.012, 1.0),
        ncols=2,
        fontsize=8.4,
        labelcolor=INK,
        facecolor="none",
        edgecolor="none",
        fancybox=False,
        shadow=False,
        handlelength=3.4,
        labelspacing=0.4,
        columnspacing=2.0,
        borderpad=0.3,
        numpoints=1,
        markerscale=1.0,
    )


def _powers(low: float, high: float, most: int) -> list[int]:
    """At most about `most` whole powers of ten between two positive numbers, evenly spaced."""
    first, last = math.ceil(math.log10(low)), math.floor(math.log10(high))
    stride = max(1, math.ceil((last - first + 1) / most))
    return list(range(first, last + 1, stride))


def drawable_text(text: str) -> str:
    """`text` with a question mark for every sign that the font lacks; the full text stands in the description."""
    from matplotlib import font_manager

    charmap = font_manager.get_font(font_manager.findfont(FONT)).get_charmap()
    return "".join(letter if ord(letter) in charmap or letter == "\n" else "?" for letter in text)


def _plainly_styled(figure: Any) -> None:
    """Take back what a user's global settings may have put on single artists."""
    from matplotlib.text import Text

    artists = figure.findobj()
    # The box behind a text is no child of it.
    boxes = [box for text in artists if isinstance(text, Text) and (box := text.get_bbox_patch()) is not None]
    for artist in [*artists, *boxes]:
        artist.set_path_effects([])
        artist.set_sketch_params(None)
        if isinstance(artist, Text):
            artist.set_fontfamily(FONT)
            artist.set_fontstyle("normal")
            artist.set_usetex(False)
            # A dollar sign in a variable's name is no formula.
            artist.set_parse_math(False)


# --- the document ---------------------------------------------------------------------------------------------------


def standalone(drawing: str, title: str, description: str) -> str:
    """A drawing as a document of its own: named for screen readers, with ids that no other picture on a page has."""
    body = drawing[drawing.index("<svg") :]
    mark = hashlib.sha256(f"{title}\n{description}".encode()).hexdigest()[:8]
    # The drawing's own ids are random.
    ids = {
        found: f"curve-{mark}-{count}" for count, found in enumerate(dict.fromkeys(re.findall(r' id="([^"]+)"', body)))
    }
    body = re.sub(r' id="([^"]+)"', lambda found: f' id="{ids[found[1]]}"', body)
    body = re.sub(r'href="#([^"]+)"', lambda found: f'href="#{ids[found[1]]}"', body)
    # A style sheet would reach beyond the picture on a page that holds it.
    body = re.sub(r"\s*<defs>\s*<style[^>]*>[^<]*</style>\s*</defs>", "", body)
    body = re.sub(r"url\(#([^)]+)\)", lambda found: f"url(#{ids[found[1]]})", body)
    start, end = body.split(">", 1)
    # Pixels are what every reader of SVG knows; some refuse points.
    start = re.sub(r'(width|height)="([\d.]+)pt"', lambda found: f'{found[1]}="{float(found[2]) * 4 / 3:.6g}"', start)
    names = f"curve-{mark}-title", f"curve-{mark}-text"
    return (
        '<?xml version="1.0" encoding="utf-8"?>\n'
        f'{start} style="stroke-linejoin: round; stroke-linecap: butt" role="img" '
        f"aria-labelledby={quoteattr(' '.join(names))}>\n"
        f' <title id="{names[0]}">{escape(wording.clean(title))}</title>\n'
        f' <desc id="{names[1]}">{escape(wording.clean(description))}</desc>{end}'
    )
