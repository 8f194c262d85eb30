"""The commands: each parses, calls the rooms below, and shows."""
