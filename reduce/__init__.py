"""The inverse side: from spectra to turning points, and the command."""
