import runpy
from pathlib import Path
from types import SimpleNamespace

import pytest

KIT = Path(__file__).resolve().parent / "survey_kit.py"


@pytest.fixture(scope="session")
def kit():
    """Writes surveys of exact wakes to disk."""
    return SimpleNamespace(**runpy.run_path(str(KIT)))
