"""The self-contained page of a result."""

from mwdlink.report.page import index_page, render

__all__ = ["index_page", "render"]
