"""The database, and nothing but the database: takes and gives tables, never rows or sessions."""

from skylag.archive.records import DayHead, DayRecord, SiteStates
from skylag.archive.store import Archive, open_archive
from skylag.archive.tasks import Ending, Task, Wanted

__all__ = ["Archive", "DayHead", "DayRecord", "Ending", "SiteStates", "Task", "Wanted", "open_archive"]
