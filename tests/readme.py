"""What README.md shows, and what the program says today."""

import re
import warnings
from pathlib import Path

from click.testing import CliRunner

README = Path(__file__).parent.parent / "README.md"

NUMBER = re.compile(r"[-+]?\d[\d,]*\.?\d*(e[-+]?\d+)?")


def block(name: str) -> str:
    """The fenced text between ``<!-- NAME -->`` and ``<!-- end -->``."""
    text = README.read_text(encoding="utf-8")
    between = text.split(f"<!-- {name} -->", 1)[1].split("<!-- end -->", 1)[0]
    return between.split("```", 2)[1].partition("\n")[2].rstrip("\n")


def without_figures(line: str) -> str:
    """The line with every number, and the units of time that vary with it, taken out."""
    return re.sub(r"# (ms|s|min)\b|under # ms", "# s", NUMBER.sub("#", line)).strip()


def python_examples() -> str:
    """All interactive examples, as one doctest."""
    fenced = re.findall(r"```python\n(.*?)```", README.read_text(encoding="utf-8"), flags=re.DOTALL)
    return "\n".join(code for code in fenced if ">>>" in code)


def drag(x):
    """The model of README.md."""
    import numpy as np

    speed, width = x
    return 0.6 * width * speed**2 + np.exp(-speed)


def tired_gradient(x):
    """Its wrong gradient."""
    import numpy as np

    speed, width = x
    return np.array([1.2 * width * speed + np.exp(-speed), -0.6 * speed**2])


def demo_output() -> str:
    """What ``gradcheck demo`` prints."""
    from gradcheck.command_line import commands

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return CliRunner().invoke(commands, ["demo"]).stdout


def mismatch_output() -> str:
    """The error text of the wrong gradient."""
    import gradcheck

    return str(gradcheck.check(drag, at=[3.0, 0.5], gradient=tired_gradient, on_refuted="return"))


def scan_output() -> str:
    """The printed scan."""
    import gradcheck

    return str(gradcheck.scan(drag, at=[3.0, 0.5], along=0))


OUTPUTS = {"demo": demo_output, "mismatch": mismatch_output, "scan": scan_output}
