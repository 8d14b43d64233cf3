"""Figures: places in the projection, contour values, data of the curves, and the files, each against an independent way."""

from __future__ import annotations

import io
import re
import xml.etree.ElementTree as ET

import numpy as np
import pytest
from PIL import Image
from support import slow
from support.crystals import conventional, random_rotation, rewritten
from support.groups import rotations
from support.published import mandel
from support.runs import returned_run

from strainkit.crystal.symmetry import find_symmetry
from strainkit.derive.derived import derive_properties
from strainkit.derive.elastic import from_tensor_file
from strainkit.fit.magnitude import converge
from strainkit.fit.result import fit_run, usable_jobs
from strainkit.present.figures import FORMATS
from strainkit.present.figures_curves import expected_error, magnitude_shifts, shape_data, stress_strain
from strainkit.present.figures_poles import Room, poles, projected
from strainkit.present.figures_projection import QUANTITIES, directional_values, level_decimals, projection, projections
from strainkit.tensors.sixvectors import stiffness_to_voigt
from strainkit.tensors.textfile import parse_tensor


def unprojected(places: np.ndarray) -> np.ndarray:
    """Directions (k, 3) with X down and Y right of places in the unit disc: J. P. Snyder, Map Projections (1987), eq. 24."""
    radius = np.hypot(*places.T)
    angle = 2.0 * np.arcsin(np.clip(radius / 2**0.5, 0.0, 1.0))
    turn = np.arctan2(places[:, 0], -places[:, 1])
    return np.column_stack([np.sin(angle) * np.cos(turn), np.sin(angle) * np.sin(turn), np.cos(angle)])


def typed(entry: str, laue: str, crystal=None, frame="ieee"):
    """A published tensor on a synthetic cell of its Laue class."""
    voigt = stiffness_to_voigt(mandel(entry))
    text = "axes ieee\n" + "\n".join(" ".join(f"{x:.6f}" for x in row) for row in voigt)
    crystal = crystal or conventional(laue)
    return derive_properties(from_tensor_file(parse_tensor(text, entry), crystal, find_symmetry(crystal), frame))


@pytest.fixture(scope="module")
def albite():
    """A triclinic crystal, turned, so that no two frames are alike."""
    return typed(
        "albite_An0_Brown2016", "-1", rewritten(conventional("-1"), random_rotation(np.random.default_rng(3)), np.eye(3))
    )


def test_known_poles():
    """Middle, down, right; [111] of a cube lies 54.736 degrees from Z, sin(27.368 deg) / sin(45 deg) from the middle."""
    places = projected(np.array([[0, 0, 1], [1, 0, 0], [0, 1, 0], [1, 1, 1], [0, 0, -1], [1, 1, -1]]))
    reach = np.sin(np.radians(54.7356103 / 2)) / np.sin(np.radians(45)) / 2**0.5
    expected = [(0, 0), (0, -1), (1, 0), (reach, -reach), (0, 0), (-reach, reach)]
    assert places == pytest.approx(np.array(expected), rel=0, abs=1e-8)


def test_equal_solid_angles_are_equal_areas():
    """Directions spread evenly over the sphere are spread evenly over the disc: a quarter of them within half its radius."""
    vectors = np.random.default_rng(5).normal(size=(40_000, 3))
    radius = np.hypot(*projected(vectors).T)
    for share in (0.3, 0.5, 0.8):
        assert (radius < share).mean() == pytest.approx(share**2, rel=0, abs=4 * (share**2 * (1 - share**2) / 40_000) ** 0.5)


def test_cubic_closed_form():
    """J. F. Nye, Physical Properties of Crystals (1957): 1/E[100] = S11, 1/E[111] = S11 - 2 (S11 - S12 - S44/2) / 3."""
    found = typed("Si_CRC", "m-3m")
    s = np.linalg.inv(stiffness_to_voigt(mandel("Si_CRC")))
    expected = 1 / s[0, 0], 1 / (s[0, 0] - 2 / 3 * (s[0, 0] - s[0, 1] - s[3, 3] / 2))
    values = directional_values(found.elastic, "young-modulus", np.array([[1, 0, 0], [1, 1, 1]]) / [[1], [3**0.5]])
    assert values == pytest.approx(expected, rel=1e-9)
    assert projection(found, "linear-compressibility") is None  # the same in every direction of a cube
    assert [d.name for d in projections(found)] == ["young-modulus", "shear-least", "shear-most"]


@pytest.mark.parametrize("name", QUANTITIES)
def test_drawn_contours_lie_where_the_quantity_has_their_value(albite, name):
    """Points of the lines, turned back into directions, against four-index sums in the frame of the figure."""
    drawn = projection(albite, name)
    assert drawn is not None
    compliance = slow.four_indices(albite.elastic.moduli.rotated(albite.elastic.frame.rotation, "ieee").voigt)

    def value(n):
        if name == "young-modulus":
            return slow.young(compliance, n)
        if name == "linear-compressibility":
            return 1e3 * slow.compressibility(compliance, n)
        first = np.linalg.svd(n[None])[2][1:]
        turns = np.radians(np.arange(0, 180, 2))
        every = [slow.shear(compliance, n, np.cos(a) * first[0] + np.sin(a) * first[1]) for a in turns]
        return min(every) if name == "shear-least" else max(every)

    lines = next(c for c in drawn.figure.axes[0].collections if getattr(c, "levels", None) is not None and not c.filled)
    checked = 0
    for level, path in zip(lines.levels, lines.get_paths(), strict=True):
        for n in unprojected(path.vertices[::37]):
            assert value(n) == pytest.approx(level, rel=0.01)
            checked += 1
    assert checked > 20


def test_marked_poles_are_those_of_planes_and_directions(albite):
    """Normals as cross products of edges, directions as sums of edges, in the frame of the figure."""
    frame, (a, b, c) = albite.elastic.frame.rotation, albite.elastic.axes.vectors
    expected = {
        "(001)": np.cross(a, b),
        "[001]": c,
        "(111)": np.cross(b - a, c - a),
        "[101]": a + c,
    }
    found = {pole.label: pole.place for pole in poles(albite.elastic, Room())}
    for label, vector in expected.items():
        assert unprojected(found[label][None])[0] @ frame @ vector == pytest.approx(np.linalg.norm(vector), rel=1e-9)


@pytest.mark.parametrize("name", QUANTITIES)
def test_every_contour_value_is_written(albite, name):
    """Of each line that runs through the disc, beside it; at most two values may lack room for it."""
    axes = projection(albite, name).figure.axes[0]
    lines = next(c for c in axes.collections if getattr(c, "levels", None) is not None and not c.filled)
    drawn = {level for level, path in zip(lines.levels, lines.get_paths(), strict=True) if len(path.vertices)}
    written = {float(t.get_text()): t.get_position() for t in axes.texts if re.fullmatch(r"[\d.]+", t.get_text())}
    assert set(written) <= drawn
    assert len(drawn) - len(written) <= 2
    for level, place in written.items():
        path = lines.get_paths()[list(lines.levels).index(level)]
        assert np.hypot(*(path.vertices - place).T).min() == pytest.approx(0, rel=0, abs=1e-9)


def test_labels_do_not_overlap(albite):
    placed = [pole.label_at for pole in poles(albite.elastic, Room()) if pole.label]
    assert len(placed) > 12
    for i, one in enumerate(placed):
        for other in placed[:i]:
            assert abs(one[0] - other[0]) > 0.18 or abs(one[1] - other[1]) > 0.08


def test_map_is_legible_in_grey_and_under_its_ink(albite):
    """Relative luminance (WCAG 2) rises with the value, and the ink stands out from every shade by 3 to 1 or more."""

    def luminance(colour):
        rgb = np.asarray(colour[:3])
        linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
        return float(linear @ [0.2126, 0.7152, 0.0722])

    filled = next(c for c in projection(albite, "young-modulus").figure.axes[0].collections if getattr(c, "filled", False))
    shades = [luminance(c) for c in filled.to_rgba(0.5 * (filled.levels[1:] + filled.levels[:-1]))]
    assert shades == sorted(shades)
    assert (shades[0] + 0.05) / (luminance((0x0B / 255, 0x0E / 255, 0x12 / 255)) + 0.05) > 3


@pytest.mark.parametrize(("levels", "decimals"), [([40, 60], 0), ([1.25, 1.5], 2), ([3.5, 4.0], 1), ([0.002, 0.004], 3)])
def test_decimals_of_levels(levels, decimals):
    assert level_decimals(np.array(levels)) == decimals


@pytest.fixture(scope="module")
def silicon(tmp_path_factory):
    return returned_run(tmp_path_factory.mktemp("runs") / "silicon", "m-3m", (0.005, 0.01))


def test_points_of_the_curves_are_the_returned_stresses(silicon):
    """S = det(F) F^-1 sigma F^-T of each job, turned by a rotation of the cube that brings its strain onto the shape."""
    plan, table = silicon
    fit = fit_run(plan, table)
    stress = {r.label: r.stress for r in table.records}
    frame = plan.frames["ieee"].rotation
    group = np.einsum("ji,gjk,kl->gil", frame, rotations("m-3m"), frame)
    for shape in shape_data(fit):
        xx, yy, zz, yz, xz, xy = shape.unit * [1, 1, 1, 0.5, 0.5, 0.5]
        unit = frame.T @ np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]]) @ frame
        for label, t, drawn in zip(shape.labels, shape.strain, shape.stress, strict=True):
            job = next(job for job in plan.jobs if job.label == label)
            if not job.shape:
                continue
            turn = min(group, key=lambda g: np.abs(g @ (t * unit) @ g.T - job.strain).max())
            assert turn @ (t * unit) @ turn.T == pytest.approx(job.strain, rel=0, abs=1e-9)
            a, b, c, d, e, f = stress[label]
            inverse = np.linalg.inv(job.gradient)
            second = np.linalg.det(job.gradient) * inverse @ np.array([[a, f, e], [f, b, d], [e, d, c]]) @ inverse.T
            back = frame @ turn.T @ second @ turn @ frame.T
            expected = [back[0, 0], back[1, 1], back[2, 2], back[1, 2], back[0, 2], back[0, 1]]
            # what the symmetry of the strained cell forbids is not drawn: noise of 0.01 GPa at most
            assert drawn == pytest.approx(np.array(expected), rel=0, abs=0.06)


def test_curves_follow_the_stiffness(silicon):
    """Slope of the model at rest: C times the shape, from the printed tensor."""
    fit = fit_run(*silicon)
    voigt = np.array(fit.to_dict("ieee")["stiffness_GPa"])
    for shape in shape_data(fit):
        grid, stress = shape.curve
        middle = len(grid) // 2
        slope = (stress[middle + 1] - stress[middle - 1]) / (grid[middle + 1] - grid[middle - 1])
        assert slope == pytest.approx(voigt @ shape.unit, rel=1e-6, abs=1e-6)
    assert len(stress_strain(fit)) == len(shape_data(fit))


def test_magnitude_figures_show_the_study(silicon):
    plan, table = silicon
    found = converge(plan, *usable_jobs(plan, table))
    shifts = magnitude_shifts(found)
    assert [t.get_text() for t in shifts.figure.axes[0].get_yticklabels()] == list(found.names)
    bars = shifts.figure.axes[0].containers
    assert bars[-1].lines[0].get_xdata() == pytest.approx(found.shift, rel=1e-9)
    curve = next(x for x in expected_error(found).figure.axes[0].lines if x.get_label() == "this set")
    assert curve.get_xdata() == pytest.approx([0.5, 1.0], rel=1e-9)
    assert curve.get_ydata() == pytest.approx([found.expected_error(m).max() for m in (0.005, 0.01)], rel=0.02)


def test_files(albite):
    drawn = projection(albite, "young-modulus")
    files = {format: drawn.to_bytes(format) for format in FORMATS}
    assert Image.open(io.BytesIO(files["png"])).size[0] > 600
    assert files["pdf"].startswith(b"%PDF")
    assert all(b"strainkit" in content for content in files.values())
    for text in (files["svg"].decode(), inline := drawn.inline()):
        root = ET.fromstring(text)
        space = "{http://www.w3.org/2000/svg}"
        assert root.attrib["role"] == "img"
        assert root.find(f"{space}title").text == "Young's modulus"
        assert "Least" in root.find(f"{space}desc").text
        ids = [e.attrib["id"] for e in root.iter() if "id" in e.attrib]
        assert len(ids) == len(set(ids))
        assert all(name.startswith("young-modulus-") for name in ids)
    assert inline == drawn.inline()
    assert len(inline) < 250_000
