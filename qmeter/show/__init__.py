"""Floor 7: pure rendering, from results to text and pictures."""
