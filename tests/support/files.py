"""Small structure files written by hand."""

from __future__ import annotations

from pathlib import Path

#: silicon with the cubic lattice constant of the Tersoff potential (5.432 A: Tersoff, Phys. Rev. B 39, 5566, 1989)
SILICON = """silicon
1.0
0.000 2.716 2.716
2.716 0.000 2.716
2.716 2.716 0.000
Si
2
Direct
0.00 0.00 0.00
0.25 0.25 0.25
"""

#: CO2 in Pa-3, cell and O position from memory of A. Simon & K. Peters, Acta Cryst. B 36, 2750 (1980)
DRY_ICE = """data_dry_ice
_cell_length_a 5.624
_cell_length_b 5.624
_cell_length_c 5.624
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma 90
_space_group_name_H-M_alt 'P a -3'
loop_
_atom_site_label
_atom_site_type_symbol
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
_atom_site_occupancy
C1 C 0 0 0 1
O1 O 0.1185 0.1185 0.1185 1
"""


def write(folder: Path, name: str, text: str) -> Path:
    """Write a file and return its path."""
    path = folder / name
    path.write_text(text)
    return path
