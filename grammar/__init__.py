"""The netlist language: text to syntax tree and back."""
