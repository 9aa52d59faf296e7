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
    """The line with every number taken out, and with it the unit of time and the width of the column, which vary."""
    named = re.sub(r"# (ms|s|min)\b|under # ms", "# s", NUMBER.sub("#", line))
    return re.sub(r"\s+", " ", named).strip()


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


def excerpt(name: str, said: str) -> str:
    """What README.md shows of an output: all of it, or the telling parts of the long demo."""
    if name != "demo":
        return said
    lines = said.splitlines()

    def part(start: str, after: int = 0) -> list[str]:
        first = next(k for k in range(after, len(lines)) if start in lines[k])
        last = next(k for k in range(first, len(lines)) if lines[k] == "")
        return lines[first:last]

    second_claim = next(k for k, line in enumerate(lines) if line.startswith("  gradient of temperature"))
    kink, jump = part("HAZARD kink"), part("HAZARD jump")
    return "\n".join(
        [
            *lines[:second_claim],
            "...",
            "",
            *kink,
            "",
            *jump,
            "",
            "...",
            "",
            *part("Best steps for objective"),
            "",
            "...",
        ]
    )


def refresh() -> None:
    """Write today's outputs into README.md."""
    text = README.read_text(encoding="utf-8")
    for name, output in OUTPUTS.items():
        before, _, rest = text.partition(f"<!-- output: {name} -->\n")
        after = rest.partition("<!-- end -->")[2]
        shown = excerpt(name, output())
        text = f"{before}<!-- output: {name} -->\n```text\n{shown}\n```\n<!-- end -->{after}"
    README.write_text(text, encoding="utf-8")


if __name__ == "__main__":
    refresh()
