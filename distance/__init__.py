"""From an MK type and photometry to reddening, distance, luminosity and radius."""
