"""Pictures of results, for files and for the terminal. Drawing only: every number comes from a result object."""
