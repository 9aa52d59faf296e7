"""The step-size curve as a picture."""

import builtins
import math
import pickle
import re
import subprocess
import sys
from functools import cache
from pathlib import Path
from xml.etree import ElementTree

import matplotlib as mpl
import numpy as np
import pytest

import gradcheck
from gradcheck.errors import MissingExtra
from gradcheck.report.plots import headline, remarks, scan_svg, subtitle
from gradcheck.report.scan_text import scan_text
from tests.unit.test_scan_text import scan

ROOT = Path(gradcheck.__file__).parent.parent
SPACE = "{http://www.w3.org/2000/svg}"
CURVE = gradcheck.scan(math.exp, at=1.0)
CASES = {
    "smooth": CURVE,
    "line": gradcheck.scan(lambda x: 3 * x + 0.1, at=1.3),
    "constant": gradcheck.scan(lambda x: 2.0, at=1.0),
    "kink": gradcheck.scan(abs, at=0.0),
    "plateau": gradcheck.scan(lambda x: math.floor(100 * x) / 100, at=0.5551),
    "edge": gradcheck.scan(lambda x: math.log(x - 0.99), at=1.0),
    "huge": gradcheck.scan(lambda x: 1e300 * math.exp(x), at=1.0),
    "tiny": gradcheck.scan(lambda x: 1e-300 * math.exp(x), at=1.0),
    "by hand": scan(),
    "nothing": scan(errors=np.full(43, math.nan), best_step=math.nan, order=math.nan, value=math.nan, bound=math.inf),
    "no steps": scan(steps=[], values=[], errors=[], best_step=math.nan, order=math.nan),
    "one error": scan(steps=[1e-3, 1e-2], values=[1.0, 1.0], errors=[1e-3, math.nan], best_step=1e-3),
}
EACH = pytest.mark.parametrize("name", CASES)


@cache
def picture(name):
    return scan_svg(CASES[name])


def parsed(svg):
    return ElementTree.fromstring(svg)


def words(svg):
    root = parsed(svg)
    return root.find(f"{SPACE}title").text, root.find(f"{SPACE}desc").text


@EACH
def test_a_picture_is_a_complete_document(name):
    svg = picture(name)

    assert svg.startswith('<?xml version="1.0" encoding="utf-8"?>\n<svg ')
    assert parsed(svg).tag == f"{SPACE}svg"


@pytest.mark.parametrize("name", ["smooth", "plateau", "constant"])
def test_the_same_record_gives_the_same_picture(name):
    assert scan_svg(CASES[name]) == picture(name)


@EACH
def test_a_screen_reader_is_told_what_was_found(name):
    curve, svg = CASES[name], picture(name)
    root = parsed(svg)
    title, text = words(svg)

    assert title == headline(curve)
    assert text.startswith(subtitle(curve))
    assert all(remark in text for remark in remarks(curve))
    assert root.get("role") == "img"
    named = root.get("aria-labelledby").split()
    assert [element.get("id") for element in (root.find(f"{SPACE}title"), root.find(f"{SPACE}desc"))] == named


def test_the_words_give_the_best_step_its_error_the_derivative_and_the_order():
    title, text = words(picture("smooth"))

    assert title.startswith("exp along x: best step ")
    assert float(title.split()[-1]) == pytest.approx(CURVE.best_step, rel=0.05)
    assert "2.718281828 ± " in text
    assert "power 2 of the step" in text
    assert "power -1 of the step" in text or "power -0.9" in text


def test_the_picture_and_the_text_tell_the_same_error():
    curve = scan(best_error=2e-12, floor=1e-12, bound=5e-11)

    assert "an error of about 5e-11" in subtitle(curve)
    assert "an error of about 5e-11" in " ".join(scan_text(curve).split())


@pytest.mark.parametrize(
    ("name", "title"),
    [
        ("constant", "every step is exact"),
        ("kink", "no step gives a derivative"),
        ("plateau", "no step gives a derivative"),
        ("nothing", "no curve to draw"),
        ("no steps", "no curve to draw"),
        ("one error", "no curve to draw"),
    ],
)
def test_where_there_is_no_curve_or_no_step_the_title_says_so(name, title):
    assert words(picture(name))[0].endswith(title)


def test_steps_without_an_error_are_counted():
    missing = int(np.isnan(CASES["edge"].errors).sum())

    assert f"Not drawn: {missing} steps without a finite error." in words(picture("edge"))[1]


def test_ids_are_unique_in_a_picture_and_differ_between_pictures_so_that_a_page_can_hold_several():
    first, second = (re.findall(r' id="([^"]+)"', picture(name)) for name in ("smooth", "line"))

    assert len(set(first)) == len(first)
    assert not set(first) & set(second)


@EACH
def test_every_reference_inside_a_picture_leads_somewhere(name):
    svg = picture(name)
    ids = set(re.findall(r' id="([^"]+)"', svg))

    assert set(re.findall(r'href="#([^"]+)"', svg)) | set(re.findall(r"url\(#([^)]+)\)", svg)) <= ids


def test_a_picture_needs_nothing_from_elsewhere_and_leaves_a_page_alone():
    svg = picture("smooth")

    assert "<style" not in svg
    assert "<script" not in svg
    assert "<image" not in svg
    assert not re.search(r'href="(?!#)', svg)


def test_measured_errors_are_marks_and_branches_are_lines_of_different_dashes():
    svg = picture("smooth")
    dashes = set(re.findall(r"stroke-dasharray: ([^;\"]+)", svg))

    drawn = int((np.isfinite(CURVE.errors) & (CURVE.errors > 0)).sum())
    assert svg.count("<use ") >= drawn
    assert len(dashes) >= 3


@pytest.mark.parametrize("name", ["<b>&\"'$x^{-1$", "名前", "a" * 300, "bell\x07", "x\u202ey", "", "\N{ROCKET}"])
def test_any_name_can_be_drawn(name):
    title, _ = words(scan_svg(scan(along=name, function=name, unit=name, notices=(name,))))

    assert len(title) < 120


def test_settings_of_the_user_neither_change_the_picture_nor_are_changed():
    plain = picture("smooth")
    odd = {
        "font.size": 30,
        "axes.grid": False,
        "lines.linewidth": 9,
        "path.sketch": (1, 100, 2),
        "axes.facecolor": "red",
        "text.usetex": True,
        "svg.hashsalt": "other",
    }
    with mpl.rc_context(odd):
        before = dict(mpl.rcParams)

        assert CURVE.to_svg() == plain
        assert dict(mpl.rcParams) == before


def test_drawing_asks_for_no_window_toolkit():
    program = (
        "import gradcheck, math, sys; gradcheck.scan(math.exp, at=1.0).to_svg(); "
        "print('matplotlib.pyplot' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True, cwd=ROOT)

    assert done.stdout.strip() == "False"


def test_a_record_that_travelled_between_processes_still_draws():
    assert pickle.loads(pickle.dumps(CURVE)).to_svg() == picture("smooth")


def test_a_record_made_by_hand_says_how_it_is_drawn():
    with pytest.raises(gradcheck.UsageError, match=r"scan_svg\(record\)"):
        scan().to_svg()


def test_without_matplotlib_the_extra_is_named(monkeypatch):
    real = builtins.__import__

    def without(name, *rest):
        if name.partition(".")[0] == "matplotlib":
            raise ImportError(name)
        return real(name, *rest)

    monkeypatch.setattr(builtins, "__import__", without)
    with pytest.raises(MissingExtra, match=r"needs matplotlib, which is not installed.*'report'"):
        CURVE.to_svg()


def test_the_renderer_is_no_data():
    told = CURVE.to_dict()

    assert "renderer" not in told
    assert set(told["truncation"]) == {"slope", "level", "lower", "upper", "errors"}
