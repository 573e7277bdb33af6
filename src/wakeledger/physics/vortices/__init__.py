"""Vortices: where they are, how strong, and what they cost."""
