"""Workers, progress and the run folder."""
