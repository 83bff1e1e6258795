"""Names of the files in a run folder."""

from typing import Final

JOURNAL: Final = "journal.sqlite"
RECORD: Final = "record.h5"
PART: Final = "record.h5.part"
RESULT: Final = "result.json"
RUN_LOCK: Final = "run.lock"
RECORD_LOCK: Final = "record.lock"
