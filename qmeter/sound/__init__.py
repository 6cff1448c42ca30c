"""Floor 4: where samples come from and where they are kept."""
