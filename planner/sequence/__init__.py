"""The sequence language: reading, problems with places, timelines, and compiling to a shot table."""
