"""Records in builtin types, so that they travel: JSON, worker processes, test reports."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import fields, is_dataclass
from enum import Enum
from typing import Any

import numpy as np


def plain(value: Any) -> Any:
    """`value` in dict, list, str, int, float, bool and None only.

    Records become dicts of their fields (but for the rendered text of a report, and its renderer), arrays lists, enums
    their word. NaN and the infinities become ``"nan"``, ``"inf"`` and ``"-inf"``, because strict JSON has none of them.
    """
    if is_dataclass(value) and not isinstance(value, type):
        # The text of a report is rendered from the rest of it; the sentence of a finding is data.
        rendered = {"text", "renderer"} if hasattr(value, "to_dict") else set()
        return {field.name: plain(getattr(value, field.name)) for field in fields(value) if field.name not in rendered}
    if isinstance(value, Enum):
        return value.value
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, np.generic):
        return plain(value.item())
    if isinstance(value, float):
        return value if math.isfinite(value) else str(value)
    if value is None or isinstance(value, bool | int | str):
        return value
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, Sequence | set | frozenset):
        return [plain(item) for item in value]
    return str(value)
