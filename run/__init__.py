"""Starfathom: MK types, distances and radii from low-resolution stellar spectra."""

__version__ = "0.1.0"
