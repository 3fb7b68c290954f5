"""Masks: time that is not to be used, with the reason. No sample is changed."""
