"""Spectral densities of epochs, and their averages."""
