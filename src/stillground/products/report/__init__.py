"""The report page, made from the product files alone: one offline page a run, or two results side by side."""

from stillground.products.report.comparison import write_comparison
from stillground.products.report.page import REPORT, write_report

__all__ = ["REPORT", "write_comparison", "write_report"]
