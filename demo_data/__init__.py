"""An invented plant: a seeded simulation that writes exports and the truth behind them."""
