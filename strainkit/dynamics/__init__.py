"""Lattice dynamics through phonopy: displaced cells, force constants, internal strain, sound speeds."""
