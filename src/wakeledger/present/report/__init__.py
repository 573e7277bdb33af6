"""The report of a finished ledger, one self-contained HTML file."""
