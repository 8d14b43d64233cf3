"""One table for a whole set: units, signs and orders written out by hand, and mistakes named with line and column."""

from __future__ import annotations

import numpy as np
import pytest
from support.crystals import conventional
from support.published import mandel
from support.returned import linear_law, write_returns

from strainkit.collect.csvtable import Convention, read_csv
from strainkit.collect.gather import collect_run
from strainkit.errors import InputError, UsageError
from strainkit.prepare.runfolder import plan_run, write_run

#: xx yy zz yz xz xy in GPa
STRESS = np.array([1.0, -2.0, 3.0, 0.4, -0.5, 0.6])
#: 1 eV/A^3 = 160.2176634 GPa (CODATA elementary charge); 1 GPa = 10 kbar = 1000 MPa by definition
EV = 160.2176634


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    run = tmp_path_factory.mktemp("table") / "run"
    plan, _ = write_run(plan_run(conventional("m-3m")), run)
    return run, plan


def read(made, tmp_path, text, **options):
    path = tmp_path / "table.csv"
    path.write_text(text)
    return read_csv(path, made[1], Convention.of(*(options.get(k) for k in ("unit", "sign", "order"))))


def line(values):
    return ",".join(map(repr, map(float, values)))


@pytest.mark.parametrize(
    ("head", "values", "options"),
    [
        ("label,xx,yy,zz,yz,xz,xy", STRESS, {}),
        ("Label, XX ,yy_kbar,zz_MPa,zy,zx,yx", STRESS * [1, 10, 1000, 1, 1, 1], {}),
        ("job;xx_kbar;yy_kbar;zz_kbar;xy_kbar;yz_kbar;xz_kbar", 10 * STRESS[[0, 1, 2, 5, 3, 4]], {}),
        ("label\tstress_xx\tstress_yy\tstress_zz\tstress_yz\tstress_xz\tstress_xy", -STRESS, {"sign": "compression"}),
        ("label xx yy zz yz xz xy", STRESS / EV, {"unit": "eV/A^3"}),
        ("label,s1,s2,s3,s4,s5,s6", STRESS[[0, 1, 2, 5, 3, 4]], {"order": "xx yy zz xy yz xz"}),
        ("label,xx,yy,zz,yz,xz,xy", STRESS[[0, 1, 2, 5, 3, 4]], {"order": "xx yy zz xy yz zx"}),
        ("label,xx (GPa),yy (GPa),zz [GPa],yz,xz,xy", STRESS, {}),
    ],
)
def test_units_signs_and_orders(made, tmp_path, head, values, options):
    separator = next((c for c in ",;\t" if c in head), " ")
    found = read(
        made,
        tmp_path,
        f"# by hand\n{head}\n\nreference,{line(values)}\n".replace("reference,", "reference" + separator).replace(
            ",", separator
        )
        if separator != ","
        else f"# by hand\n{head}\n\nreference,{line(values)}\n",
        **options,
    )
    np.testing.assert_allclose(found["reference"].stress, STRESS, rtol=1e-7)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "empty table"),
        ("xx,yy\n1,2\n", "no column named label"),
        ("label,xx,yy,zz,yz,xz\n", "no column for xy"),
        ("label,xx,xx,zz,yz,xz,xy\n", "two columns for xx"),
        ("label,xx_psi,yy,zz,yz,xz,xy\n", "column xx_psi: unknown unit 'psi'"),
        ("label,xx,yy,zz,yz,xz,xy\nnobody,1,2,3,4,5,6\n", "line 2: no job 'nobody'"),
        ("label,xx,yy,zz,yz,xz,xy\nreference,1,2,3,4,5,6\n\nreference,1,2,3,4,5,6\n", "line 4: reference comes twice"),
        ("label,xx,yy,zz,yz,xz,xy\nreference,1,2,3,4,5,six\n", "line 2, column xy: 'six' is not a number"),
        ("label,xx,yy,zz,yz,xz,xy\nreference,1,2,nan,4,5,6\n", "line 2, column zz: 'nan'"),
        ("label,xx,yy,zz,yz,xz,xy\nreference,1,2,3\n", "line 2, column yz: nothing there"),
        ("label,energy_Ry,xx,yy,zz,yz,xz,xy\n", "energies are in eV"),
        ("label,xx\0,yy\n", "no column for"),
    ],
)
def test_mistakes_are_named(made, tmp_path, text, message):
    with pytest.raises(InputError) as caught:
        read(made, tmp_path, text)
    assert message in caught.value.what


def test_options_that_contradict_the_header(made, tmp_path):
    with pytest.raises(InputError, match="header says kbar, --stress-unit GPa"):
        read(made, tmp_path, "label,xx_kbar,yy,zz,yz,xz,xy\n", unit="GPa")
    for options in ({"unit": "psi"}, {"sign": "minus"}, {"order": "xx yy"}, {"order": "xx yy zz yz xz xz"}):
        with pytest.raises(UsageError):
            read(made, tmp_path, "", **options)


def test_a_table_and_outputs_give_the_same_stresses_and_stay(cli, tmp_path):
    """The table of one run, typed into another: same numbers; a later collect keeps what has no output."""
    first, second = tmp_path / "a", tmp_path / "b"
    plan, _ = write_run(plan_run(conventional("mmm")), first)
    write_run(plan_run(conventional("mmm")), second)
    write_returns(first, plan, linear_law(mandel("aragonite_Liu2005")))
    table = collect_run(first, plan)
    table.save(first)
    typed = tmp_path / "typed.csv"
    rows = [f"{r.label},{line(-10 * r.stress)},{r.energy}" for r in table.records]
    typed.write_text("label,xx_kbar,yy_kbar,zz_kbar,yz_kbar,xz_kbar,xy_kbar,energy\n" + "\n".join(rows))
    out = cli("collect", second, "--table", typed, "--stress-sign", "compression", "--json")
    assert out.code == 0, out.out
    assert cli("collect", second, "--stress-sign", "tension").code == 2
    again = cli("collect", second, "--json")
    for result in (out.json, again.json):
        for record, truth in zip(result["records"], table.records, strict=True):
            np.testing.assert_allclose(record["stress_GPa"], truth.stress, rtol=1e-12)
    assert cli("fit", second).code == 0
    assert cli("progress", second, "--json").json["states"] == {"done": len(plan.jobs)}


@pytest.mark.parametrize(
    ("suffix", "options", "assumed"), [("", [], True), ("_GPa", [], False), ("", ["--stress-unit", "GPa"], False)]
)
def test_a_unit_named_nowhere_is_said_to_be_assumed(cli, made, tmp_path, suffix, options, assumed):
    run = tmp_path / "run"
    write_run(made[1], run)
    typed = tmp_path / "typed.csv"
    head = ",".join(f"{c}{suffix}" for c in ("xx", "yy", "zz", "yz", "xz", "xy"))
    typed.write_text(f"label,{head}\n" + "\n".join(f"{job.label},{line(STRESS)}" for job in made[1].jobs[:1]))
    for arguments in (["--table", typed, *options], []):  # the second time from the stress table that the first one wrote
        out = cli("collect", run, *arguments)
        assert ("info unit-assumed" in out.out) == assumed
        assert ("[typed.csv]" in out.out) == assumed


def test_a_table_does_not_vouch_for_the_jobs_behind_it(cli, made, tmp_path):
    run = tmp_path / "run"
    write_run(made[1], run)
    law = linear_law(mandel("Si_CRC"))
    write_returns(run, made[1], law, only={made[1].jobs[0].label})
    typed = tmp_path / "typed.csv"
    typed.write_text(f"label,xx,yy,zz,yz,xz,xy\n{made[1].jobs[1].label},{line(STRESS)}")
    cli("collect", run, "--table", typed)
    for command in ("collect", "progress"):
        text = " ".join(cli(command, run).out.split())
        assert "done 1 finished, converged, and of the planned cell" in text
        assert "done 1 from a table" in text
