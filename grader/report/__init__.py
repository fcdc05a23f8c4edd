"""What a person sees of a run: a page, a contact sheet, a table on the terminal, a spreadsheet.

Everything is made from parsed log lines (see ``docs/REPORT.md``); no source picture is opened here.
"""

from __future__ import annotations

from grader.report.cells import write_csv
from grader.report.contact import write_contact_sheet
from grader.report.page import write_html
from grader.report.terminal import table

__all__ = ["table", "write_contact_sheet", "write_csv", "write_html"]
