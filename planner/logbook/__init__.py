"""The logbook: everything planned, sent, measured and decided. The only room that talks SQL."""

from planner.logbook.book import Logbook, NightRow, open_logbook
from planner.logbook.place import default_place

__all__ = ["Logbook", "NightRow", "default_place", "open_logbook"]
