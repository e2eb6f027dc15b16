"""Circuits as numbers: netlists, device laws, operating point, small-signal and transient response."""
