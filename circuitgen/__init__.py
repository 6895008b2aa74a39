"""circuitgen: from densities, reconstructions and recordings to a wired cortex."""

__version__ = "0.1.0"
