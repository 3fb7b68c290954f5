"""Spectral analysis of physiologic recordings from checked recipes, with provenance."""
