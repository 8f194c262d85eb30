"""Running a night: the dispatcher and what surrounds it."""
