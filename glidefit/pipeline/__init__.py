"""The order of the steps, and nothing else."""
