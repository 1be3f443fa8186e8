"""From a spectrum to an MK type: reading, preparing, measuring, matching, assigning."""
