"""The report of a run: figures and text, made from the archive alone."""

from daq.report.summary import summary
from daq.report.text import lines

__all__ = ["lines", "summary"]
