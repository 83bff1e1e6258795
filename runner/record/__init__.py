"""The record of a run: points and captures in, a journal and ``record.h5`` on the disk, arrays out.

Writing goes through a `Journal`, one transaction a point; `consolidate` makes the file that people open;
`open_run` reads it, and `write_extraction` adds results to it. The room never knows instruments, physics or
the command line.
"""

from runner.record.by_hand import write_captures_run
from runner.record.consolidation import consolidate, start_consolidation
from runner.record.errors import RecordError
from runner.record.extractions import write_extraction
from runner.record.flags import SENTENCES, UNUSABLE, Flag, flag_names, is_acceptable
from runner.record.folder import new_run_folder
from runner.record.journal import Journal, append_event
from runner.record.lock import is_being_acquired
from runner.record.reading import LegTimes, Live, Session, live_points
from runner.record.rows import (
    METHODS,
    CalibrationRow,
    CaptureRow,
    EventRow,
    InstrumentRow,
    Level,
    Method,
    PartRow,
    PointRow,
    RunHeader,
    SettingRow,
)
from runner.record.run import PointCaptures, Run, open_run
from runner.record.tables import ExtractionTables, IsatTable, SurfaceTable
from runner.record.verify import verify_record

__all__ = [
    "METHODS",
    "SENTENCES",
    "UNUSABLE",
    "CalibrationRow",
    "CaptureRow",
    "EventRow",
    "ExtractionTables",
    "Flag",
    "InstrumentRow",
    "IsatTable",
    "Journal",
    "LegTimes",
    "Level",
    "Live",
    "Method",
    "PartRow",
    "PointCaptures",
    "PointRow",
    "RecordError",
    "Run",
    "RunHeader",
    "Session",
    "SettingRow",
    "SurfaceTable",
    "append_event",
    "consolidate",
    "flag_names",
    "is_acceptable",
    "is_being_acquired",
    "live_points",
    "new_run_folder",
    "open_run",
    "start_consolidation",
    "verify_record",
    "write_captures_run",
    "write_extraction",
]
