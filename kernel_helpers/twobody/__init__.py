"""Two-body motion: universal-variable propagation and classical elements."""
