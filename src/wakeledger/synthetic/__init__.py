"""Exact data with known answers, for tests and planning.

The truth shares no code with what it judges: this room imports only the vocabulary and the stream.
"""

from wakeledger.synthetic.elements import GaussianElements, mutual_drag, vortex_pair

__all__ = ["GaussianElements", "mutual_drag", "vortex_pair"]
