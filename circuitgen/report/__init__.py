"""The report of a run: one page, and figures as files."""

from circuitgen.report.write import write_report

__all__ = ["write_report"]
