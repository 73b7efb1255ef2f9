"""Noise of sensors and disturbances from routine data: a start, a likelihood, a maximum, and what it is worth."""
