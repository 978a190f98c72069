"""The page that every run writes about itself: `report.html`, self-contained."""

from loopint.report.page import write_report

__all__ = ["write_report"]
