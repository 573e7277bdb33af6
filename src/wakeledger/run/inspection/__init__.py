"""A survey looked at before it is reduced: whether it is good and complete, and one may move on."""

from wakeledger.run.inspection.plane import inspect_plane
from wakeledger.run.inspection.section import inspect_section

__all__ = ["inspect_plane", "inspect_section"]
