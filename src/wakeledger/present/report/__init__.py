"""The report of a finished ledger, one self-contained HTML file."""

from wakeledger.present.report.document import report_html

__all__ = ["report_html"]
