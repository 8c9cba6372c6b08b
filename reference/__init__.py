"""Knows: published values and exact limits of model fluids, each with its source, range and accuracy."""

from reference.catalogue import find, names
from reference.equation_of_state import Reference

__all__ = ["Reference", "find", "names"]
