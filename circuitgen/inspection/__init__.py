"""The check of reconstructions: measures, remarks, drawings, mended files."""

from circuitgen.inspection.sheet import Sheet, inspect_file

__all__ = ["Sheet", "inspect_file"]
