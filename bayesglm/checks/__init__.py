"""Checks of the method itself: simulated recordings with a known truth, and splits of real ones."""
