"""Numbers drawn from spectra, and from the epochs of a pulse wave."""
