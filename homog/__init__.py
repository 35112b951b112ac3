"""Effective elastic properties of lattices and folded sheets, from a requirement to ranked unit cells."""
