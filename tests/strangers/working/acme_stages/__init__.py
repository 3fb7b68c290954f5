"""Stages of a stranger: a package that is not part of waveassay."""
