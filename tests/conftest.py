"""Fixtures shared by all tests."""

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

REFERENCE = Path(__file__).parent / "reference"


@pytest.fixture(scope="session")
def check_values() -> Callable[[str], Any]:
    """Look up a published value by its name; every entry of the file carries its source."""
    entries = json.loads((REFERENCE / "check_values.json").read_text(encoding="utf-8"))["values"]
    values = {entry["name"]: entry["value"] for entry in entries}
    return values.__getitem__
