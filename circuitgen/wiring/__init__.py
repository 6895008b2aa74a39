"""The maximum-entropy law of wiring: fit, match, draw."""
