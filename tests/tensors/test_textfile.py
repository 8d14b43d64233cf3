"""Typed tensors: published ones of every Laue class come back whole; slips of the pen are refused by name and line."""

from __future__ import annotations

import numpy as np
import pytest
from support.groups import LAUE_CLASSES, rotations
from support.published import BY_LAUE_CLASS, entries, mandel

from strainkit.errors import InputError
from strainkit.tensors.constants import constant_basis
from strainkit.tensors.invariants import invariant_matrices
from strainkit.tensors.laue import laue_settings
from strainkit.tensors.sixvectors import stiffness_to_voigt
from strainkit.tensors.textfile import parse_tensor, read_tensor

SILICON = "C11 165.78\nC12 63.94\nC44 79.62\n"


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_first_settings_are_the_conventional_groups(laue):
    """Against groups closed from axes and angles in tests/support/groups.py."""
    mine, theirs = laue_settings(laue)[0].rotations, rotations(laue)
    assert len(mine) == len(theirs)
    assert all(np.abs(theirs - g).max(axis=(1, 2)).min() < 1e-9 for g in mine)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
def test_published_list_and_its_laue_class_give_the_whole_tensor(laue):
    entry = entries()[BY_LAUE_CLASS[laue]]
    errors = entry.get("uncertainty_GPa", {})
    lines = [
        f"{name} = {value}" + (f" +- {errors[name]}" if name in errors else "")
        for name, value in entry["stiffness_GPa"].items()
    ]
    file = parse_tensor("\n".join([f"laue {laue}", *lines]))
    stiffness, _ = file.stiffness()
    np.testing.assert_allclose(stiffness.mandel, mandel(BY_LAUE_CLASS[laue]), rtol=0, atol=1e-9)
    assert (stiffness.covariance is not None) == bool(errors)
    if errors:
        for name, error in errors.items():
            i, j = int(name[1]) - 1, int(name[2]) - 1
            assert stiffness.standard_errors[i, j] == pytest.approx(error, rel=1e-9)


@pytest.mark.parametrize("laue", LAUE_CLASSES)
@pytest.mark.parametrize("shape", ["full", "upper", "lower"])
def test_matrix(laue, shape):
    voigt = stiffness_to_voigt(mandel(BY_LAUE_CLASS[laue]))
    first = {"full": lambda i: 0, "upper": lambda i: i, "lower": lambda i: 0}[shape]
    last = {"full": lambda i: 6, "upper": lambda i: 6, "lower": lambda i: i + 1}[shape]
    rows = [", ".join(f"{voigt[i, j]:.3f}" for j in range(first(i), last(i))) for i in range(6)]
    stiffness, words = parse_tensor("\n".join(["# a remark", *rows])).stiffness()
    np.testing.assert_allclose(stiffness.voigt, voigt, rtol=0, atol=6e-4)
    assert words == "not stated"
    assert stiffness.covariance is None


def test_matrix_with_errors_and_words():
    rows = ["100 50 50 0 0 0", "50 100 50 0 0 0", "50 50 100 0 0 0", "0 0 0 30 0 0", "0 0 0 0 30 0", "0 0 0 0 0 30"]
    text = "name: x y\nunit = kbar\ndensity 2329 kg/m3\ntemperature 298 K\naxes crystal\n"
    text += "source A. Other, Letters 1, 2; table [4]\n"
    file = parse_tensor(text + "\n".join(rows) + "\nstandard errors:\n" + "\n".join(["1 1 1 1 1 1"] * 6))
    assert (file.name, file.density, file.temperature, file.axes) == ("x y", 2329.0, 298.0, "crystal")
    assert file.source == "A. Other, Letters 1, 2; table [4]"
    assert parse_tensor(text.replace("2329 kg/m3", "2.329 g/cm^3") + "\n".join(rows)).density == pytest.approx(
        2329.0, rel=1e-12
    )
    stiffness, _ = file.stiffness()
    assert stiffness.voigt[0, 1] == pytest.approx(5.0, rel=1e-12)
    np.testing.assert_allclose(stiffness.standard_errors, 0.1, rtol=1e-9, atol=0)


@pytest.mark.parametrize(
    ("text", "value", "error"), [("165.8(5)", 165.8, 0.5), ("165.8 0.5", 165.8, 0.5), ("165.8±0.5", 165.8, 0.5)]
)
def test_ways_to_write_an_error(text, value, error):
    entry = parse_tensor(f"c_11 = {text}").entries["C11"]
    assert (entry.value, entry.error) == pytest.approx((value, error), rel=1e-12)


def test_equal_constants_are_one_measurement():
    """C22 of a cubic crystal repeats C11: its error is not averaged down."""
    text = "laue m-3m\nC11 100 1\nC22 100 1\nC33 100 1\nC12 50 1\nC44 30 1"
    assert parse_tensor(text).stiffness()[0].standard_errors[0, 0] == pytest.approx(1.0, rel=1e-9)


def test_settings_follow_the_names():
    """-3m with C15 has its two-fold axis along Y, 2/m with C16 its unique axis along Z."""
    trigonal = "laue -3m\nC11 87\nC12 7\nC13 12\nC33 106\nC44 58\n"
    for name, words in (("C14", "two-fold along X"), ("C15", "two-fold along Y")):
        stiffness, found = parse_tensor(f"{trigonal}{name} -18").stiffness()
        assert words in found
        assert stiffness.voigt[0, int(name[2]) - 1] == pytest.approx(-18, rel=1e-9)
    names = ["C11", "C12", "C13", "C16", "C22", "C23", "C26", "C33", "C36", "C44", "C45", "C55", "C66"]
    monoclinic = "laue 2/m\n" + "\n".join(f"{name} {50 if name[1] == name[2] else 5}" for name in names)
    stiffness, found = parse_tensor(monoclinic).stiffness()
    assert "along Z" in found
    assert stiffness.voigt[0, 5] == pytest.approx(5, rel=1e-9)


def test_dependent_constants_may_be_given_in_any_combination():
    """C66 and C12 of a hexagonal crystal fix C11."""
    stiffness, _ = parse_tensor("laue 6/mmm\nC66 50\nC12 40\nC13 30\nC33 120\nC44 20").stiffness()
    assert stiffness.voigt[0, 0] == pytest.approx(140, rel=1e-9)


def test_a_crystals_own_rotations_complete_the_list():
    group = rotations("4/mmm")
    stiffness, _ = parse_tensor("C11 10\nC12 3\nC13 2\nC33 20\nC44 4\nC66 5").stiffness(group)
    basis = constant_basis(invariant_matrices(group), np.eye(3))
    assert basis.values(stiffness.mandel) == pytest.approx([10, 3, 2, 20, 4, 5], rel=1e-9)


def test_a_full_matrix_is_never_changed():
    """Even where the Laue class that the file names would change it; the caller reports that."""
    rows = ["100 50 50 0 0 0", "50 90 50 0 0 0", "50 50 80 0 0 0", "0 0 0 30 0 0", "0 0 0 0 30 0", "0 0 0 0 0 30"]
    stiffness, _ = parse_tensor("laue m-3m\n" + "\n".join(rows)).stiffness()
    assert np.diag(stiffness.voigt)[:3] == pytest.approx([100, 90, 80], rel=1e-12)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "no constants"),
        (SILICON, "missing constants: C13, C14"),
        ("laue mmm\n" + SILICON, "missing constants: C13, C22, C23, C33, C55, C66"),
        ("laue m3m\n" + SILICON, "'m3m' is not a Laue class"),
        ("laue m-3m\nC11 x", "line 2: 'x' is not a number"),
        ("laue m-3m\n" + SILICON + "C14 3", "C14 must be zero by symmetry"),
        ("laue m-3m\n" + SILICON + "C21 60", "line 5: C12 is 63.94 further up and 60 here"),
        ("C11 = 1e400", "too large"),
        ("hello", "line 1: cannot make sense of 'hello'"),
        ("axes lab\n" + SILICON, "unknown axes 'lab'"),
        ("unit psi\n" + SILICON, "unknown unit 'psi'"),
        ("density -5\n" + SILICON, "density '-5' is not a positive number"),
        ("density 2.33 kg/l\n" + SILICON, "unknown unit 'kg/l' of the density"),
        ("temperature 25 C\n" + SILICON, "unknown unit 'C' of the temperature"),
        ("1 2 3\n4 5 6", "rows of 3, 3 numbers"),
        ("1 2 3 4 5 6\n" * 6, "not symmetric: row 1 column 3 is 3, row 3 column 1 is 1"),
        ("1 2 3 4 5 6\n" * 6 + SILICON, "both a matrix and named constants"),
        ('{"schema": 1}', "JSON"),
    ],
)
def test_slips_are_named(text, message):
    with pytest.raises(InputError) as caught:
        parse_tensor(text, "file.txt").stiffness()
    assert message in str(caught.value)
    assert "file.txt" in str(caught.value)


def test_a_published_contradiction_is_found():
    """AlN: a public database record lists C66 = 229.25 beside C11 = 410, C12 = 148.5, although (C11 - C12)/2 = 130.75 (see the
    entry's notes in tests/data/published_stiffness.json)."""
    text = "laue 6/mmm\nC11 410\nC12 148.5\nC13 98.9\nC33 388.5\nC44 124.6\n"
    with pytest.raises(InputError, match=r"C66 = 229.25, but symmetry and C11, C12 give 130.75"):
        parse_tensor(text + "C66 229.25").stiffness()
    assert parse_tensor(text + "C66 131").stiffness()[0].voigt[5, 5] == pytest.approx(130.75, rel=1e-9)  # rounded


def test_unreadable_files(tmp_path):
    with pytest.raises(InputError, match="No such file"):
        read_tensor(tmp_path / "nothing.txt")
    (tmp_path / "binary").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match="not a text file"):
        read_tensor(tmp_path / "binary")
