"""Reconstructions: SWC intake, repair, arbors as arrays, stand-in growth."""
