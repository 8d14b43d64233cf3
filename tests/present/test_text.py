"""Terminal output: 80 columns, colours only where they belong, and names from files that cannot steer a terminal."""

from __future__ import annotations

import json
import re
import sys

import pytest
from support.files import SILICON
from support.runs import returned_run

from strainkit.findings import finding
from strainkit.present.numbers import uncertain
from strainkit.present.text import columns, findings_text, heading, printable

#: set the window title, clear the screen, an 8-bit control sequence, a change of writing direction: ECMA-48, Unicode TR 36
STEERING = "a\x1b]0;owned\x07b\x1b[2Jc\x9b31md\u202ee\x7f"


def steers(text: str) -> bool:
    return any((ord(c) < 32 and c not in "\n\t") or 0x7F <= ord(c) < 0xA0 or c in "\u202e\u2028" for c in text)


def test_controls_are_spelt_out():
    assert steers(STEERING)
    assert printable(STEERING) == r"a\x1b]0;owned\x07b\x1b[2Jc\x9b31md\u202ee\x7f"
    assert printable("half \udcff") == r"half \udcff"
    assert printable("Å, é, 水, a tab\tand a line\n") == "Å, é, 水, a tab\tand a line\n"
    assert printable("\x1b[1mbold\x1b[0m \x1b[31mred") == "\x1b[1mbold\x1b[0m \x1b[31mred"  # strainkit's own
    text = json.dumps({STEERING: ["half \udcff", STEERING]}, ensure_ascii=False)
    assert not steers(printable(text, as_json=True))
    assert json.loads(printable(text, as_json=True)) == json.loads(text)


@pytest.mark.parametrize("name", [STEERING, "no utf-8 \udcff"])
def test_the_name_of_a_file_is_only_shown(cli, tmp_path, name):
    """Through the command line: the page, its JSON, and the message of an error."""
    path = tmp_path / f"{name}.vasp"
    path.write_text(SILICON)
    for arguments in ([path, "--json"] if name == STEERING else [path], [tmp_path / f"{name}.cif"]):
        result = cli("inspect", *arguments)
        assert result.code in (0, 3)
        assert not steers(result.out + result.err)
        (result.out + result.err).encode()  # no half characters either
        assert "owned" in result.out + result.err or "no utf-8" in result.out + result.err


def test_colours_on_a_terminal_only(monkeypatch):
    found = [finding("curved", "here", "a warning"), finding("job-broken", "there", "an error")]
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.delenv("NO_COLOR", raising=False)
    assert "\x1b" not in findings_text(found)
    monkeypatch.setattr(sys.stdout, "isatty", lambda: True)
    text = findings_text(found)
    assert text.index("\x1b[31merror job-broken") < text.index("\x1b[33mwarning curved")
    assert heading("x") == "\x1b[1mx\x1b[0m"
    monkeypatch.setenv("NO_COLOR", "")  # https://no-color.org: set and not empty
    assert "\x1b" in findings_text(found)
    monkeypatch.setenv("NO_COLOR", "1")
    assert "\x1b" not in findings_text(found) + heading("x")


def test_wide_tables_are_cut():
    header = ["name", *(f"column {i}" for i in range(20))]
    rows = [[f"r{k}", *(f"{k}.{i}" for i in range(20))] for k in range(3)]
    text = columns(rows, header)
    assert max(map(len, text.splitlines())) <= 80
    assert sorted(re.findall(r"column \d+", text)) == sorted(header[1:])
    for k in range(3):
        lines = [line.split() for line in text.splitlines() if line.split()[:1] == [f"r{k}"]]
        assert [cell for line in lines for cell in line[1:]] == rows[k][1:]
    assert columns([["a", "b"]]) == "  a  b"


@pytest.fixture(scope="module")
def triclinic(tmp_path_factory):
    """21 constants at two magnitudes, under a name of a hundred letters."""
    from dataclasses import replace

    from support.crystals import conventional

    folder = tmp_path_factory.mktemp("runs") / "run"
    returned_run(folder, "-1", (0.005, 0.01), crystal=replace(conventional("-1"), name="long name " * 10))
    return folder


@pytest.mark.parametrize("command", ["fit", "derive", "converge", "collect", "progress"])
def test_pages_are_narrow_plain_and_end_with_findings(cli, triclinic, command):
    result = cli(command, triclinic)
    assert result.code == 0
    lines = result.out.splitlines()
    assert max(map(len, lines)) <= 80
    assert "\x1b" not in result.out
    place = max((i for i, line in enumerate(lines) if line in ("Findings", "No findings.")), default=None)
    assert place is not None
    assert all(re.match(r"  (error|warning|info) [a-z-]+: |      ", line) for line in lines[place + 1 :])


def test_labels_of_the_progress_bar_are_plain(monkeypatch, capsys):
    """rich would take [bold] for a style, and a terminal a control sequence for an order."""
    from strainkit.cli.options import progress

    monkeypatch.setattr(sys.stderr, "isatty", lambda: True)
    monkeypatch.setenv("FORCE_COLOR", "1")
    monkeypatch.setenv("TERM", "xterm")
    with progress("work", quiet=False) as report:
        report(1, 2, f"[bold]{STEERING}")
    seen = capsys.readouterr().err
    assert "[bold]" in seen
    assert "\x1b]0;" not in seen
    assert r"\x1b]0;owned" in seen


def test_errors_in_the_last_digits():
    """Rounding by hand; the bracket holds nothing but a number of units of the last digit."""
    for value, error, text in (
        (12.345, 0.42, "12.3(4)"),
        (12.345, 0.0142, "12.345(14)"),
        (0.27524312, 3e-9, "0.275243(0)"),
        (0.27524312, 8e-7, "0.275243(1)"),
        (1234.0, 56.0, "1230(60)"),
        (1.0, 0.0, "1.0000(0)"),
        (1.0, None, "1.00"),
    ):
        assert uncertain(value, error) == text
