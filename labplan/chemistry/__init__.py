"""Structures, sugars, couplings and masses: pure functions, the only importer of RDKit."""
