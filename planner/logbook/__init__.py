"""The logbook: the only room that talks SQL."""
