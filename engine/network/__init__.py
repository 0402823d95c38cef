"""The circuit as a graph: islands, trees, loops, cut-sets, chokes."""
