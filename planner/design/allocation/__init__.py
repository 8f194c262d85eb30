"""What to spend a night on: holds, phases and packets for a goal, with a proof of how good the choice is."""
