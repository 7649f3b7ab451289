"""Figures, pages, PDF and pictures of a study; nothing here simulates."""

from hedgesim.report.facts import OptionMark, RunFacts
from hedgesim.report.pack import write_report

__all__ = ["OptionMark", "RunFacts", "write_report"]
