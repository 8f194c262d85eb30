"""What a night will give, before it is run: errors against time, targets, alternatives, rehearsals by the thousand."""
