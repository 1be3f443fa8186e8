"""An invented observing run: simulated spectra, their target list, and the truth behind them."""
