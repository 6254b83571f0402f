"""The published check values, read from tests/data/check_values.toml."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

import numpy as np

if sys.version_info >= (3, 11):
    import tomllib
else:
    import tomli as tomllib

PATH = Path(__file__).resolve().parents[1] / "data" / "check_values.toml"
CASES: dict[str, dict[str, Any]] = tomllib.loads(PATH.read_text(encoding="utf-8"))["cases"]


def assert_published(case: dict[str, Any], key: str, found: Any) -> None:
    """Compare with the printed value within the tolerance that its printed digits allow."""
    expected = np.asarray(case["expected"][key], float)
    difference = np.max(np.abs(np.asarray(found, float) - expected))
    assert difference <= case["tolerance"][key], f"{key}: off by {difference:g} from {case['source']}"
