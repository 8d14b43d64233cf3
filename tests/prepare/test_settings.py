"""The settings file: every key checked, every mistake named with its remedy."""

from __future__ import annotations

import pytest
from support.files import write

from strainkit.errors import InputError
from strainkit.prepare.settings import SITE_KEYS, read_settings, seconds


def test_later_files_override_key_by_key(tmp_path):
    one = write(tmp_path, "one.toml", '[site]\naccount = "a"\ntasks = 4\n[pseudopotentials]\nfolder = "/p"\nSi = "Si.upf"\n')
    two = write(tmp_path, "two.toml", '[site]\ntasks = 8\n[deck]\necutwfc = 50\n[pseudopotentials]\nO = "O.upf"\n')
    found = read_settings([one, two])
    assert found.site["account"] == "a"
    assert found.site["tasks"] == 8
    assert found.deck == {"ecutwfc": 50}
    assert found.folder == "/p"
    assert found.pseudopotentials == {"Si": "Si.upf", "O": "O.upf"}
    assert set(found.site) == set(SITE_KEYS)


@pytest.mark.parametrize(
    ("text", "message", "remedy"),
    [
        ("[site", "not valid TOML", ""),
        ("[sight]\na = 1", "unknown table or key 'sight'", "deck, pseudopotentials, engine, site"),
        ("walltime = '1:00:00'", "unknown table or key 'walltime'", ""),
        ("[site]\nwaltime = '01:00:00'", "unknown key 'waltime' in [site]", "Did you mean 'walltime'?"),
        ("[site]\nwalltime = '1 hour'", "no time limit", "HH:MM:SS"),
        ("[site]\nwalltime = '00:00:00'", "no time limit", "HH:MM:SS"),
        ("[site]\nmemory = '16'", "no amount of memory", "16GB"),
        ("[site]\ntasks = 0", "a whole number above zero", ""),
        ("[site]\ntasks = true", "a whole number above zero", ""),
        ("[site]\ntasks = '4'", "a whole number above zero", ""),
        ("[site]\nmodules = 'qe'", "a list of single lines", ""),
        ('[site]\naccount = "a\\nrm -rf x"', "a text of one line", ""),
        ("[pseudopotentials]\nXx = 'a'", "'Xx' is no chemical element", ""),
        ("[pseudopotentials]\nSi = 3", "must be a text", ""),
    ],
)
def test_mistakes(tmp_path, text, message, remedy):
    path = write(tmp_path, "settings.toml", text)
    with pytest.raises(InputError) as caught:
        read_settings([path])
    assert message in caught.value.what
    assert remedy in caught.value.remedy
    assert caught.value.where == str(path)


def test_missing_file(tmp_path):
    with pytest.raises(InputError, match="No such file"):
        read_settings([tmp_path / "nothing.toml"])


@pytest.mark.parametrize(("text", "expected"), [("00:01:30", 90), ("1-00:00:00", 86400), ("100:00:00", 360000)])
def test_time_limits(text, expected):
    assert seconds(text) == expected
