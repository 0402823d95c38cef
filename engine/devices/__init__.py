"""What can be placed in a circuit, each with one set of equations."""
