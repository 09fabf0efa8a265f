"""The page for the design review: one self-contained file from one record."""

from allocator.report.page.build import page_html, write_page

__all__ = ["page_html", "write_page"]
