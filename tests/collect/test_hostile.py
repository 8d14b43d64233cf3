"""Packed files, and files that nobody's program wrote: refused with one line of reason, never run, never waited for."""

from __future__ import annotations

import bz2
import gzip
import lzma
import os
import pickle
import time
from contextlib import suppress
from pathlib import Path

import numpy as np
import pytest
from ase.build import bulk
from ase.calculators.singlepoint import SinglePointCalculator
from ase.io import write as ase_write
from support.outputs import content, unpack

from strainkit.collect import source
from strainkit.collect.readers import read_returned, recognise
from strainkit.errors import InputError


def refusal(path: Path, **options) -> str:
    """The message with which a recognised file is refused."""
    reader = recognise(path)
    assert reader is not None
    with pytest.raises(InputError) as caught:
        read_returned(path, reader, **options)
    message = str(caught.value)
    assert "\n" not in message
    assert "Traceback" not in message
    return message


def silicon():
    atoms = bulk("Si")
    atoms.calc = SinglePointCalculator(atoms, energy=-10.0, stress=np.array([0.01, 0.02, 0.03, 0.004, 0.005, 0.006]))
    return atoms


PACKERS = {".gz": gzip.compress, ".xz": lzma.compress, ".bz2": bz2.compress, "": lambda data: data}


@pytest.mark.parametrize("suffix", [".gz", ".xz", ".bz2"])
@pytest.mark.parametrize("name", ["qe/single.out", "abinit/single.abo", "gpaw/single.gpw"])
def test_packed_outputs_read_as_plain_ones(name, suffix, tmp_path):
    """The name does not matter, the content does."""
    plain = unpack(name, tmp_path)
    packed = tmp_path / "anything"
    packed.write_bytes(PACKERS[suffix](content(name)))
    one, other = (read_returned(path, recognise(path)) for path in (plain, packed))
    assert one.program == other.program
    assert not other.problems
    np.testing.assert_array_equal(one.stress, other.stress)


@pytest.mark.parametrize("format", ["traj", "db", "json", "extxyz"])
@pytest.mark.parametrize("suffix", [".gz", ".xz", ".bz2", ""])
def test_packed_formats_of_ase(format, suffix, tmp_path):
    plain, packed = tmp_path / f"plain.{format}", tmp_path / "packed"
    ase_write(plain, silicon(), format=format)
    packed.write_bytes(PACKERS[suffix](plain.read_bytes()))
    returned = read_returned(packed, recognise(packed))
    np.testing.assert_allclose(np.diag(returned.stress), np.array([1.6022, 3.2044, 4.8065]), rtol=1e-4)


@pytest.mark.parametrize("suffix", [".gz", ".xz", ".bz2"])
def test_what_unpacks_without_end_is_stopped(suffix, tmp_path, monkeypatch):
    monkeypatch.setattr(source, "LARGEST", 2 * 1024**2)
    path = tmp_path / "bomb"
    path.write_bytes(PACKERS[suffix](content("qe/single.out") + b"\n" * (16 * 1024**2)))
    assert path.stat().st_size < 100_000
    assert "unpacks to more than 2 MiB" in refusal(path)


def test_a_plain_file_that_is_too_large_is_not_read(tmp_path, monkeypatch):
    monkeypatch.setattr(source, "LARGEST", 2 * 1024**2)
    path = tmp_path / "large"
    path.write_bytes(content("qe/single.out") + b"\n" * (3 * 1024**2))
    assert "larger than 2 MiB" in refusal(path)


@pytest.mark.parametrize("suffix", [".gz", ".xz", ".bz2"])
@pytest.mark.parametrize("share", [0.3, 0.9, 0.999])
def test_a_packed_file_that_is_cut_is_no_result(suffix, share, tmp_path):
    packed = PACKERS[suffix](content("qe/relaxed.out"))
    path = tmp_path / "cut"
    path.write_bytes(packed[: int(share * len(packed))])
    if recognise(path) is not None:
        assert "copy it again" in refusal(path)
    else:
        assert "copy it again" in source.damaged_packing(path)
    path.write_bytes(packed)
    assert not source.damaged_packing(path)


def test_packed_twice_is_not_unpacked_twice(tmp_path):
    path = tmp_path / "twice"
    path.write_bytes(gzip.compress(gzip.compress(content("qe/single.out"))))
    assert recognise(path) is None


@pytest.mark.parametrize("name", ["qe/single.out", "abinit/single.abo", "cp2k/single.out", "gpaw/single.txt"])
def test_a_line_longer_than_any_program_writes(name, tmp_path):
    path = tmp_path / "line"
    path.write_bytes(content(name) + b"x" * (3 * source.LONGEST_LINE))
    assert "a line is longer than" in refusal(path)


VASPRUN = '<?xml version="1.0"?>\n{0}<modeling><generator><i name="program">vasp</i></generator>{1}</modeling>\n'
BOMB = '<!DOCTYPE x [<!ENTITY a "aaaaaaaaaa"><!ENTITY b "&a;&a;&a;&a;&a;&a;&a;&a;"><!ENTITY c "&b;&b;&b;&b;&b;&b;&b;&b;">]>\n'


@pytest.mark.parametrize(
    ("declared", "body", "reason"),
    [
        (BOMB, "<i>&c;</i>", "entities"),
        ('<!DOCTYPE x [<!ENTITY e SYSTEM "file:///etc/passwd">]>\n', "<i>&e;</i>", "entities"),
        ("", "<i>&e;</i>", "not readable"),
        ("", "<a>" * 20_000, "end-of-job|not readable"),
        ("", "<calculation></calculation>", "not readable"),
    ],
)
def test_xml_that_is_no_vasprun(declared, body, reason, tmp_path):
    path = tmp_path / "vasprun.xml"
    path.write_text(VASPRUN.format(declared, body))
    assert any(words in refusal(path) for words in reason.split("|"))


def test_xml_in_another_coding_cannot_hide_entities(tmp_path):
    path = tmp_path / "vasprun.xml"
    path.write_bytes(b"\xff\xfe" + VASPRUN.format(BOMB, "&c;").encode("utf-16-le"))
    assert recognise(path) is None


class _Runs:
    def __init__(self, mark: Path) -> None:
        self.mark = mark

    def __reduce__(self):
        return (os.mkdir, (str(self.mark),))


@pytest.mark.parametrize("protocol", range(2, pickle.HIGHEST_PROTOCOL + 1))
def test_a_pickle_is_never_opened(protocol, tmp_path):
    path, mark = tmp_path / "result.pckl", tmp_path / "it-ran"
    path.write_bytes(pickle.dumps(_Runs(mark), protocol=protocol))
    assert "pickle" in refusal(path)
    path.write_bytes(gzip.compress(pickle.dumps(_Runs(mark), protocol=protocol)))
    assert "pickle" in refusal(path)
    assert not mark.exists()


def test_an_old_trajectory_is_a_pickle(tmp_path):
    path = tmp_path / "old.traj"
    path.write_bytes(b"PickleTrajectory" + pickle.dumps({}))
    assert "pickle" in refusal(path)


def test_links_may_not_lead_out_of_the_run_folder(tmp_path):
    run, elsewhere = tmp_path / "run", tmp_path / "elsewhere"
    (run / "jobs").mkdir(parents=True)
    elsewhere.mkdir()
    outside = unpack("qe/single.out", elsewhere)
    (run / "jobs" / "out").symlink_to(outside)
    (run / "folder").symlink_to(elsewhere)
    assert "out of the run folder" in refusal(run / "jobs" / "out", within=run)
    assert "out of the run folder" in refusal(run / "folder" / "single.out", within=run)
    inside = unpack("qe/single.out", run)
    (run / "jobs" / "again").symlink_to(inside)
    again = run / "jobs" / "again"
    assert not read_returned(again, recognise(again), within=run).problems


def test_pipes_devices_folders_and_missing_files_are_not_waited_for(tmp_path):
    os.mkfifo(tmp_path / "pipe")
    (tmp_path / "folder").mkdir()
    (tmp_path / "dangling").symlink_to(tmp_path / "nothing")
    for name in ("pipe", "folder", "dangling", "missing"):
        assert recognise(tmp_path / name) is None
    assert recognise(Path("/dev/zero")) is None
    reader = recognise(unpack("qe/single.out", tmp_path))
    for name in ("pipe", "folder", "missing"):
        with pytest.raises(InputError):
            read_returned(tmp_path / name, reader)


@pytest.mark.parametrize("name", ["line\nbreak", "at@0", "at@:", "star*[a-z]?", "-rf", "tab\tand\x1b[31m colour", "name.db@1"])
@pytest.mark.parametrize("format", ["traj", "db", "extxyz"])
def test_names_mean_nothing(name, format, tmp_path):
    """ASE would take an @ for an index and look for more files under a star."""
    path = tmp_path / name
    ase_write(tmp_path / f"plain.{format}", silicon(), format=format)
    (tmp_path / f"plain.{format}").rename(path)
    assert not read_returned(path, recognise(path)).problems
    path.write_bytes(path.read_bytes()[:150])
    if recognise(path) is not None:
        message = refusal(path)
        assert "\n" not in message
        assert "\x1b" not in message


def test_a_database_is_not_touched(tmp_path):
    path = tmp_path / "out.db"
    ase_write(path, silicon(), format="db")
    before = path.read_bytes()
    read_returned(path, recognise(path))
    assert path.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == ["out.db"]


@pytest.mark.parametrize(
    "text",
    [
        '{"1": {"calculator": ' + "[" * 100_000,
        '{"1": {"calculator": "x", "numbers": {"__ndarray__": [[1000000000], "int64", [1]]}}}',
        '1000000000000\nLattice="2 0 0 0 2 0 0 0 2" stress="1 0 0 0 1 0 0 0 1"\nSi 0 0 0\n',
        '-1\nLattice="2 0 0 0 2 0 0 0 2"\nSi 0 0 0\n',
        '0\nLattice="2 0 0 0 2 0 0 0 2" stress="1 0 0 0 1 0 0 0 1"\n',
        '1\nLattice="2 0 0 0 2 0 0 0 2" Properties=species:S:1:pos:R:999999999 stress="1 0 0 0 1 0 0 0 1"\nSi 0 0 0\n',
        '1\nLattice="0 0 0 0 0 0 0 0 0" stress="1 0 0 0 1 0 0 0 1"\nSi 0 0 0\n',
        '1\nLattice="2 0 0 0 2 0 0 0 1e999" stress="1 0 0 0 1 0 0 0 1"\nSi 0 0 0\n',
        '1\nLattice="2 0 0 0 2 0 0 0 2" stress="1 2 3 4"\nSi 0 0 0\n',
        '1\nLattice="2 0 0 0 2 0 0 0 2" stress="1 5 0 0 1 0 0 0 1"\nSi 0 0 0\n',
        '1\nLattice="2 0 0 0 2 0 0 0 2" stress="a b c d e f"\nSi 0 0 0\n',
        '1\nLattice="2 0 0 0 2 0 0 0 2" virial="_JSON {}"\nSi 0 0 0\n',
    ],
    ids=lambda text: text[:60].replace("\n", " "),
)
def test_damaged_structure_files(text, tmp_path):
    path = tmp_path / "file"
    path.write_text(text)
    if recognise(path) is not None:
        refusal(path)


@pytest.mark.parametrize("word", ["NaN", "Infinity", "*************", "1.0E+999", "0x10"])
@pytest.mark.parametrize("name", ["qe/single.out", "abinit/single.abo", "cp2k/single.out", "gpaw/single.txt"])
def test_what_is_no_number_is_no_stress(name, word, tmp_path):
    old = {"qe": "0.00047949", "abinit": "-3.62", "cp2k": "3.282", "gpaw": "-0.046377"}[name.split("/")[0]]
    text = content(name).decode()
    assert old in text
    path = tmp_path / "out"
    start = text.rindex("strten") if "abinit" in name else 0
    path.write_text(text[:start] + text[start:].replace(old, word, 1))
    try:
        assert read_returned(path, recognise(path)).problems[0][0] == "broken"
    except InputError as error:
        assert "cannot be read" in str(error) or "no " in str(error)  # noqa: PT017


@pytest.mark.parametrize(
    "filling", [" ", "1", "1.", " = ", "| ", "\n", " 1 2 3", "CELL_PARAMETERS ", "Exchange-correlation= ", "%%%% "]
)
@pytest.mark.parametrize(
    "name", ["qe/relaxed.out", "abinit/relaxed.abo", "cp2k/single.out", "gpaw/single.txt", "gpaw26/single.txt"]
)
def test_no_pattern_takes_long(name, filling, tmp_path):
    """A megabyte of what patterns could stumble over, in lines just short enough: seconds would mean a quadratic pattern."""
    line = (filling * source.LONGEST_LINE)[: source.LONGEST_LINE - 10]
    path = tmp_path / "long"
    path.write_bytes(content(name)[:20_000] + ("\n" + "\n".join([line] * 20) + "\n").encode() + content(name)[20_000:])
    start = time.process_time()
    reader = recognise(path)
    with suppress(InputError):
        read_returned(path, reader)
    assert time.process_time() - start < 2.0
