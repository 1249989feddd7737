"""The HTTP doors: read, calculate, represent, and nothing else."""
