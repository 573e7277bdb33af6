import runpy
from pathlib import Path

import pytest

EXAMPLE = Path(__file__).resolve().parents[1] / "ledger" / "example.py"


@pytest.fixture(scope="session")
def example_ledger():
    """The builder of the invented ledger."""
    return runpy.run_path(str(EXAMPLE))["example_ledger"]


@pytest.fixture(scope="session")
def ledger(example_ledger):
    return example_ledger()
