"""Logs: everything that went over the wire, in an MCAP file, written so that a kill loses nothing.

A log is read as far as it is whole: a cut or a flipped bit ends the reading with one line that says where and
why, and no damaged record is handed on.
"""

from tracker.logs.errors import LogError
from tracker.logs.reader import LogReader, Record
from tracker.logs.writer import LogWriter

__all__ = ["LogError", "LogReader", "LogWriter", "Record"]
