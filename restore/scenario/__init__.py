"""Scenarios: one file that says a whole job, and the run that does it."""
