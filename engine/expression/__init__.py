"""The expression graph, exact derivatives and the flat tape."""
