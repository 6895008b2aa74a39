"""Every place where an axon comes close to another cell."""
