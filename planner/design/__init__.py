"""What a night should do: effects, drift, running order."""
