"""Star fields drawn from the catalogue, shared by the tests of this room and the benchmarks."""

from __future__ import annotations

import sys

import pytest


@pytest.fixture(scope="session")
def drawn(root):
    """The module that draws fields (`benchmarks/drawn_fields.py`)."""
    sys.path.insert(0, str(root / "benchmarks"))
    try:
        import drawn_fields
    finally:
        sys.path.pop(0)
    return drawn_fields
