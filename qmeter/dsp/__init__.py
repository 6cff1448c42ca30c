"""Floor 1: arrays in, arrays out."""
