"""The report of a run: one page, and figures as files."""

from circuitgen.report.write import recording_troubles, write_report

__all__ = ["recording_troubles", "write_report"]
