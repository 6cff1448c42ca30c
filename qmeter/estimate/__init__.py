"""Floor 2: from the samples of a ring to its modes, with their uncertainty."""
