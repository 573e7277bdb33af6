import runpy
from pathlib import Path
from types import SimpleNamespace

import pytest


@pytest.fixture(scope="session")
def cfd():
    """Writes meshes and files of computed flow."""
    pytest.importorskip("pyvista", reason="the packages of the extra cfd are not installed")
    return SimpleNamespace(**runpy.run_path(str(Path(__file__).resolve().parent / "cfd_kit.py")))
