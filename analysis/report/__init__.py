"""The written report: one self-contained page for a network's board, from result folders.

`reading` reads the folders, `sections` writes what they say as plain blocks, and `page` and `markdown` set the same
blocks in HTML and in Markdown, so that neither can say more than the other.
"""

from analysis.report.contents import Report, report_of
from analysis.report.markdown import to_markdown
from analysis.report.page import to_html
from analysis.report.reading import read_results

__all__ = ["Report", "read_results", "report_of", "to_html", "to_markdown"]
