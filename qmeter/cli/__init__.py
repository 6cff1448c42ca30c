"""Floor 8: one file a command; the only place that prints errors and sets exit codes."""
