"""Pages to read in a browser: one per sample, and an overview over a campaign."""

from __future__ import annotations

from xrdmica.report.page.method import write_method_page
from xrdmica.report.page.write import write_overview, write_pages, write_sample_page

__all__ = ["write_method_page", "write_overview", "write_pages", "write_sample_page"]
