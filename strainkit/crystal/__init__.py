"""Reading and judging a cell: its structure, symmetry, named constants and Cartesian frames."""
