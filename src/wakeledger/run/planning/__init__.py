"""Planning of surveys: what a survey would know, found by reducing simulated ones."""

from wakeledger.run.planning.planner import plan

__all__ = ["plan"]
