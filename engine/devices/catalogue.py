"""Imports every device kind, so that the registry is full."""

from polewise.devices import passive, pole, source, switch
from polewise.devices.kind import KINDS, PARTS

__all__ = ["KINDS", "PARTS", "passive", "pole", "source", "switch"]
