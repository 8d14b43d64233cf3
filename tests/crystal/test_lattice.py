"""Planes and directions against the textbook formulas, brute force and group theory."""

from __future__ import annotations

from itertools import product
from math import gcd

import numpy as np
import pytest
from ase.build import bulk
from support.crystals import conventional, random_rotation, random_unimodular, rewritten
from support.groups import LAUE_CLASSES, rotations

from strainkit.crystal.crystal import Crystal
from strainkit.crystal.lattice import index_axes, low_indices, parse_indices
from strainkit.crystal.symmetry import find_symmetry
from strainkit.errors import UsageError
from strainkit.tensors.invariants import invariant_matrices
from strainkit.tensors.rotations import rotate_matrix


def axes_of(crystal: Crystal, given: bool = False):
    return index_axes(find_symmetry(crystal), given)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_spacing_by_the_formula_of_the_triclinic_lattice(laue):
    """1/d^2 from the six cell parameters (International Tables for Crystallography C, table 1.2.1.1, from memory)."""
    crystal = conventional(laue)
    a, b, c, alpha, beta, gamma = crystal.cell_lengths_angles
    ca, cb, cg = np.cos(np.radians([alpha, beta, gamma]))
    axes = axes_of(crystal)
    for h, k, m in low_indices():
        whole = np.array([h / a, k / b, m / c])
        metric = np.array([[1, cg, cb], [cg, 1, ca], [cb, ca, 1]])
        inverse_square = whole @ np.linalg.inv(metric) @ whole
        assert axes.spacing(np.array([h, k, m])) == pytest.approx(inverse_square**-0.5, rel=1e-9)
        normal = axes.normal(np.array([h, k, m]))
        for u in low_indices():
            if h * u[0] + k * u[1] + m * u[2] == 0:
                assert normal @ axes.direction(u) == pytest.approx(0, rel=0, abs=1e-9)


@pytest.mark.parametrize(
    ("name", "structure", "spacings"),
    [
        ("Cu", "fcc", {(1, 1, 1): 3**-0.5, (1, 0, 0): 0.5, (1, 1, 0): 8**-0.5, (2, 0, 0): 0.5}),
        ("Fe", "bcc", {(1, 1, 0): 2**-0.5, (1, 0, 0): 0.5, (1, 1, 1): 12**-0.5, (2, 1, 1): 6**-0.5}),
        ("Po", "sc", {(1, 1, 0): 2**-0.5, (1, 0, 0): 1.0, (1, 1, 1): 3**-0.5}),
    ],
)
@pytest.mark.parametrize("cubic", [False, True])
def test_lattice_planes_of_cubic_metals(name, structure, spacings, cubic):
    """Distances of neighbouring planes in units of a (Hull & Bacon, Introduction to Dislocations), from any cell."""
    atoms = bulk(name, structure, a=4.0, cubic=cubic)
    axes = axes_of(Crystal.from_atoms(atoms))
    for plane, distance in spacings.items():
        vector, found = axes.lattice_planes(np.array(plane))
        assert found == pytest.approx(4.0 * distance, rel=1e-9)
        assert np.linalg.norm(vector) == pytest.approx(1 / found, rel=1e-12)
        steps = axes.primitive @ vector
        assert steps == pytest.approx(np.round(steps), rel=0, abs=1e-9)
    assert axes.spacing(np.array([2, 0, 0])) == pytest.approx(2.0, rel=1e-9)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_lattice_planes_do_not_depend_on_how_the_cell_is_written(laue):
    rng = np.random.default_rng(6)
    crystal = conventional(laue)
    other = rewritten(crystal, np.eye(3), random_unimodular(rng))
    axes, same = axes_of(crystal), axes_of(other, given=True)
    for plane in low_indices()[:12]:
        normal = axes.normal(plane)
        theirs = np.rint(other.lattice @ (plane @ axes.reciprocal)).astype(int)
        assert np.abs(same.normal(theirs) @ normal) == pytest.approx(1, rel=1e-9)
        assert same.lattice_planes(theirs)[1] == pytest.approx(axes.lattice_planes(plane)[1], rel=1e-6)
        assert same.shortest_in_plane(theirs)[1] == pytest.approx(axes.shortest_in_plane(plane)[1], rel=1e-6)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_shortest_vector_in_a_plane_by_brute_force(laue):
    """Every lattice vector of up to five primitive steps each way."""
    axes = axes_of(conventional(laue))
    steps = np.array([s for s in product(range(-5, 6), repeat=3) if any(s)])
    vectors = steps @ axes.primitive
    for plane in [*low_indices()[:20], np.array([3, -1, 2])]:
        inside = np.abs(vectors @ axes.normal(plane)) < 1e-6
        indices, length = axes.shortest_in_plane(plane)
        assert length == pytest.approx(np.linalg.norm(vectors[inside], axis=1).min(), rel=1e-6)
        assert np.dot(indices, plane) == 0
        assert gcd(*indices) == 1


def test_shortest_vector_of_a_cubic_metal_is_the_burgers_vector():
    """a/2 [1-10] on (111) of fcc, a/2 [111] on (110) of bcc (Hull & Bacon)."""
    for name, structure, plane, length in (("Cu", "fcc", (1, 1, 1), 8**0.5), ("Fe", "bcc", (1, 1, 0), 12**0.5)):
        indices, found = axes_of(Crystal.from_atoms(bulk(name, structure, a=4.0))).shortest_in_plane(np.array(plane))
        assert found == pytest.approx(length, rel=1e-9)
        assert sorted(map(abs, indices)) == ([0, 1, 1] if structure == "fcc" else [1, 1, 1])


@pytest.mark.parametrize(
    ("laue", "plane", "count"),
    [
        *[("m-3m", (1, 0, 0), 3), ("m-3m", (1, 1, 0), 6), ("m-3m", (1, 1, 1), 4), ("m-3m", (2, 1, 0), 12)],
        *[("m-3", (2, 1, 0), 6), ("6/mmm", (1, 0, 0), 3), ("6/mmm", (0, 0, 1), 1), ("6/mmm", (1, 0, 1), 6)],
        *[("-3m", (1, 0, 1), 3), ("4/m", (2, 1, 0), 2), ("2/m", (1, 1, 1), 2), ("2/m", (1, 0, 1), 1)],
        *[("mmm", (1, 1, 1), 4), ("-1", (1, 1, 1), 1)],
    ],
)
def test_multiplicities_of_forms(laue, plane, count):
    """Half the face multiplicities of International Tables A, table 10.1.2.2: opposite faces count once."""
    axes = axes_of(conventional(laue))
    images = axes.images(np.array(plane))
    assert len(images) == count
    assert {round(float(axes.spacing(np.array(i))), 6) for i in images} == {round(float(axes.spacing(np.array(plane))), 6)}


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_families_hold_every_low_index_plane_once(laue):
    axes = axes_of(conventional(laue))
    members = [tuple(image) for family in axes.families for image in axes.images(np.array(family))]
    assert len(members) == len(set(members))
    assert {tuple(map(int, i)) for i in low_indices()} <= set(members)
    distances = [axes.lattice_planes(np.array(family))[1] for family in axes.families]
    assert distances == pytest.approx(sorted(distances, reverse=True), rel=1e-5)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_nearest_by_brute_force(laue):
    axes = axes_of(conventional(laue))
    for vector in random_rotation(np.random.default_rng(7)):
        for planes, unit in ((True, axes.normal), (False, axes.direction)):
            indices, angle = axes.nearest(vector, planes=planes)[0]
            every = np.degrees(np.arccos(np.abs([unit(np.array(i)) @ vector for i in low_indices()])))
            assert angle == pytest.approx(every.min(), rel=0, abs=1e-6)
            assert np.degrees(np.arccos(abs(unit(np.array(indices)) @ vector))) == pytest.approx(angle, rel=0, abs=1e-6)
    indices, _ = axes.nearest_in_plane(np.array([0.3, 0.5, 0.8]), np.array([1, 1, 2]))
    assert np.dot(indices, (1, 1, 2)) == 0


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_alike_vectors_keep_their_angles_and_the_stiffness(laue):
    axes = axes_of(conventional(laue))
    pair = random_rotation(np.random.default_rng(8))[:2]
    # conventional cells of the tests lie in the axes of the reference groups but for 2/m, whose cell has b along y too
    mandel = np.tensordot(
        np.arange(1, 30)[: len(invariant_matrices(rotations(laue)))], invariant_matrices(rotations(laue)), axes=1
    )
    for turned in axes.alike(pair):
        np.testing.assert_allclose(turned @ turned.T, np.eye(2), rtol=0, atol=1e-9)
        third = np.cross(*pair), np.cross(*turned)
        turn = np.column_stack([*turned, third[1]]) @ np.column_stack([*pair, third[0]]).T
        np.testing.assert_allclose(rotate_matrix(turn, mandel), mandel, rtol=0, atol=1e-8)


def test_indices_refer_to_the_conventional_cell_unless_asked_otherwise():
    primitive = Crystal.from_atoms(bulk("Si", "diamond", a=5.43))
    axes = axes_of(primitive)
    assert np.linalg.norm(axes.vectors, axis=1) == pytest.approx([5.43] * 3, rel=1e-9)
    assert "standard cell" in axes.words
    own = axes_of(primitive, given=True)
    assert own.vectors == pytest.approx(primitive.lattice, rel=0, abs=1e-9)
    assert own.words == "a, b, c of the cell as given"
    unique_c = conventional("2/m")
    permuted = rewritten(unique_c, np.eye(3), np.array([[0, 0, 1], [1, 0, 0], [0, 1, 0]]))
    assert axes_of(permuted).vectors == pytest.approx(permuted.lattice, rel=0, abs=1e-9)


def test_parse_indices():
    assert parse_indices("0,1,-2", "--plane", plane=True) == (0, 1, -2)
    assert parse_indices("1 0 -1 0", "--plane", plane=True) == (1, 0, 0)
    assert parse_indices("2,-1,-1,0", "--direction", plane=False) == (3, 0, 0)
    assert parse_indices("1,0,-1,0", "--direction", plane=False) == (2, 1, 0)
    with pytest.raises(UsageError, match="add up to 3"):
        parse_indices("1,1,1,0", "--plane", plane=True)
    for bad in ("", "1,2", "0,0,0", "1,x,2", "1.5,0,0", "1,2,3,4,5"):
        with pytest.raises(UsageError, match="are not indices"):
            parse_indices(bad, "--plane", plane=True)


@pytest.mark.parametrize("laue", ["-3m", "6/mmm", "m-3m", "4/mmm", "mmm", "2/m", "-1"])
def test_four_indices_are_for_hexagonal_axes(laue):
    """Those of the trigonal and hexagonal families only (common practice, no source)."""
    axes = axes_of(conventional(laue))
    if laue in ("-3m", "6/mmm"):
        assert parse_indices("1,0,-1,1", "--plane", True, axes) == (1, 0, 1)
        return
    assert parse_indices("1,0,1", "--plane", True, axes) == (1, 0, 1)
    with pytest.raises(UsageError, match="not hexagonal"):
        parse_indices("1,0,-1,1", "--plane", True, axes)


def test_directions_of_hexagonal_crystals_are_brought_beside_the_axes():
    """The stiffness is round about c (tested above), so a direction is named in the planes of c with a or with a*."""
    axes = axes_of(conventional("6/m"))
    for turned in axes.alike(random_rotation(np.random.default_rng(9))[:1]):
        azimuth = np.degrees(np.arctan2(turned[0, 1], turned[0, 0]))
        assert azimuth / 30 == pytest.approx(round(azimuth / 30), rel=0, abs=1e-6)
