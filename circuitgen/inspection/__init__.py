"""The check of reconstructions: measures, remarks, drawings, mended files."""

from circuitgen.inspection.mend import mend_files
from circuitgen.inspection.page import page_html
from circuitgen.inspection.sheet import Sheet, inspect_file
from circuitgen.inspection.table import table_text

__all__ = ["Sheet", "inspect_file", "mend_files", "page_html", "table_text"]
