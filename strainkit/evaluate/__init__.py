"""Local engines through ASE calculators: run a strain set on this machine, relax a reference cell."""
