"""Figures of a finished ledger."""
