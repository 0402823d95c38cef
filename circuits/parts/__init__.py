"""Netlist parts installed with polewise."""
