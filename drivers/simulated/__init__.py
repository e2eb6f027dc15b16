"""The simulated bench: instruments that speak the same bytes as real ones, in one simulated world."""
