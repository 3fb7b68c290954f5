"""Stages of a stranger who did not run the checks."""
