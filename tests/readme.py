"""What README.md shows, and what the program says today."""

import re
import warnings
from pathlib import Path
from typing import Any

from click.testing import CliRunner

README = Path(__file__).parent.parent / "README.md"
#: The picture that README.md shows.
PICTURE = Path(__file__).parent / "pictures" / "scan.svg"

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


def scanned() -> Any:
    """The scan of README.md."""
    import gradcheck

    return gradcheck.scan(drag, at=[3.0, 0.5], along="speed", names=["speed", "width"])


def scan_output() -> str:
    """The printed scan."""
    return str(scanned())


def rod_energy(x):
    """Energy of a long rod, whose pieces pull at their neighbours."""
    import numpy as np

    return float(np.sum(0.5 * (x[1:] - x[:-1]) ** 2) + np.sum(0.1 * x**4))


def rod_gradient(x):
    """Its gradient, with two wrong entries."""
    import numpy as np

    pull = np.diff(x)
    gradient = 0.4 * x**3
    gradient[:-1] -= pull
    gradient[1:] += pull
    gradient[271] *= 2.0
    gradient[82_818] = 0.0
    return gradient


def many_output() -> str:
    """The error text of a wrong gradient with 100,000 entries."""
    import numpy as np

    import gradcheck

    at = 1.0 + 0.5 * np.sin(np.arange(100_000.0))
    return str(gradcheck.check(rod_energy, at=at, gradient=rod_gradient, on_refuted="return"))


STEPS, SECONDS = 200, 0.05


def defects(z):
    """A vehicle over 200 time steps: how far position, velocity and energy are from following from the step before."""
    import numpy as np

    position, velocity, energy, thrust = z.reshape(STEPS + 1, 4).T
    return np.stack(
        [
            np.diff(position) - SECONDS * velocity[:-1],
            np.diff(velocity) - SECONDS * (thrust[:-1] - 0.02 * velocity[:-1] ** 2),
            np.diff(energy) + SECONDS * thrust[:-1] * velocity[:-1],
        ],
        axis=1,
    ).ravel()


def defects_jacobian(z):
    """Its sparse Jacobian: thrust has the wrong sign, and what energy owes to velocity is forgotten."""
    import numpy as np
    from scipy import sparse

    velocity = z.reshape(STEPS + 1, 4)[:-1, 1]
    step = np.arange(STEPS)
    blocks = [
        (0, 4, 1.0),
        (0, 0, -1.0),
        (0, 1, -SECONDS),
        (1, 5, 1.0),
        (1, 1, -1.0 + 0.04 * SECONDS * velocity),
        (1, 3, SECONDS),
        (2, 6, 1.0),
        (2, 2, -1.0),
        (2, 3, SECONDS * velocity),
    ]
    rows = np.concatenate([3 * step + row for row, _, _ in blocks])
    columns = np.concatenate([4 * step + column for _, column, _ in blocks])
    values = np.concatenate([np.broadcast_to(value, STEPS) for _, _, value in blocks])
    return sparse.csr_array((values, (rows, columns)), shape=(3 * STEPS, 4 * (STEPS + 1)))


def sparse_output() -> str:
    """The error text of the wrong sparse Jacobian."""
    import numpy as np

    import gradcheck

    z = np.random.default_rng(0).uniform(0.5, 1.5, 4 * (STEPS + 1))
    names = [f"{what}[{k}]" for k in range(STEPS + 1) for what in ("position", "velocity", "energy", "thrust")]
    return str(gradcheck.check(defects, at=z, names=names, jacobian=defects_jacobian, on_refuted="return"))


def told_by(picture: str) -> str:
    """Title and description of a picture, which say what it shows."""
    return "\n".join(re.findall(r"<(?:title|desc)[^>]*>([^<]*)</", picture))


OUTPUTS = {
    "demo": demo_output,
    "mismatch": mismatch_output,
    "many": many_output,
    "sparse": sparse_output,
    "scan": scan_output,
}


def excerpt(name: str, said: str) -> str:
    """What README.md shows of an output: all of it, or the telling parts of the long demo."""
    lines = said.splitlines()
    if name == "sparse":
        return "\n".join([*lines[: lines.index("Wrong values (200):") - 1], "", "..."])
    if name != "demo":
        return said

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
    """Write today's outputs into README.md, and its picture."""
    text = README.read_text(encoding="utf-8")
    for name, output in OUTPUTS.items():
        before, _, rest = text.partition(f"<!-- output: {name} -->\n")
        after = rest.partition("<!-- end -->")[2]
        shown = excerpt(name, output())
        text = f"{before}<!-- output: {name} -->\n```text\n{shown}\n```\n<!-- end -->{after}"
    README.write_text(text, encoding="utf-8")
    PICTURE.parent.mkdir(exist_ok=True)
    PICTURE.write_text(scanned().to_svg(), encoding="utf-8")


if __name__ == "__main__":
    refresh()
