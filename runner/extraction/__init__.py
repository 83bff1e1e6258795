"""From a run to numbers with uncertainty: L(I,T), Isat(T), winding resistance, by pulse and by bias.

Takes captures and readings as arrays, with the bench's calibration constants; gives curves, surfaces, knees with
intervals and what is doubtful about them. Pure but for `extract`, which reads a run. Never knows instruments or the
command line.
"""

from runner.extraction.calibration import Calibration, Constant
from runner.extraction.from_run import Extraction, extract
from runner.extraction.surface import Surface
from runner.record import open_run

__all__ = ["Calibration", "Constant", "Extraction", "Surface", "extract", "open_run"]
