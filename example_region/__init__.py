"""The example study: an invented island, its floods, and the truth behind them."""
