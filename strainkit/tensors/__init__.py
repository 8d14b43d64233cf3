"""Mathematics that knows no crystal: six-vectors, rotations, strain measures, invariant subspaces, the stiffness."""
