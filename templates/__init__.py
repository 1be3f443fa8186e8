"""The reference library: real stars with MK types, their recipe and their provenance."""
