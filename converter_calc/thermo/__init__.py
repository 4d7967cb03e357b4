"""Enthalpies: pure species, elements in liquid iron, molten slag."""
