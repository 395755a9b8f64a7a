"""What the user says about a block: its supplies, grounds, pins and names joined outside it."""
