"""Motion and light: predicted directions of an orbit."""
