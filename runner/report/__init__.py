"""The report: takes a run that is on disk and writes one page a colleague can read, with its pictures and
numbers.

It knows how results are shown, never how they were measured or computed: whatever it says stands in the run's
record and in its result.
"""

from runner.report.page import headlines, write_report

__all__ = ["headlines", "write_report"]
