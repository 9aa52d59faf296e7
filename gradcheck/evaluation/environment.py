"""Versions, seed and threads under which evaluations were made."""

import os
import platform
from importlib import metadata
from typing import Any

import numpy as np

from gradcheck import __version__


def environment_of(seed: int) -> dict[str, Any]:
    def version(package: str) -> str:
        try:
            return metadata.version(package)
        except metadata.PackageNotFoundError:
            return "not installed"

    threads = {name: os.environ[name] for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS") if name in os.environ}
    return {
        "gradcheck": __version__,
        "python": platform.python_version(),
        "platform": platform.platform(terse=True),
        "numpy": np.__version__,
        "scipy": version("scipy"),
        "jax": version("jax"),
        "autograd": version("autograd"),
        "seed": seed,
        "threads": threads,
    }
