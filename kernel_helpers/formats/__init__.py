"""File formats: text to plain rows and back, and nothing else."""
