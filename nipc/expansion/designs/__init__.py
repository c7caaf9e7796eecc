"""Where the propagator is run: families of nodes; each is one file."""
