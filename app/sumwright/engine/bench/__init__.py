"""The board on the bench: the run plan, the fit, the suspects, the next reading, the capture."""
