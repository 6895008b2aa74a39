"""The volume of cortex, its layers, and cells in place."""
