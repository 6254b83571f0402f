"""The orbit over all observations: measurement model, least squares, rejection, verdicts."""
