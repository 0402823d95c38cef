"""polewise: averaged netlists of power-conversion systems, checked, solved and judged."""
