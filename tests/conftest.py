"""Fixtures shared by all tests."""

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import hypothesis
import pytest

# The gate must give one verdict: the same examples every time, and no limit on the time of an example.
hypothesis.settings.register_profile("entropest", deadline=None, derandomize=True)
hypothesis.settings.load_profile("entropest")

REFERENCE = Path(__file__).parent / "reference"


@pytest.fixture(scope="session")
def check_values() -> Callable[[str], Any]:
    """Look up a published value by its name; every entry of the file carries its source."""
    entries = json.loads((REFERENCE / "check_values.json").read_text(encoding="utf-8"))["values"]
    values = {entry["name"]: entry["value"] for entry in entries}
    return values.__getitem__
