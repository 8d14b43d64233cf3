"""README's tables name every format, deck and scheduler that there is, and no other deck."""

from __future__ import annotations

import re
from pathlib import Path

from strainkit.prepare.decks import DECK_NAMES
from strainkit.prepare.scripts import SCHEDULERS
from strainkit.prepare.settings import SITE_KEYS
from strainkit.prepare.writers import FORMATS

README = (Path(__file__).parents[2] / "README.md").read_text()


def table(title: str) -> list[list[str]]:
    rows = README.split(title, 1)[1].split("\n\n", 1)[0].splitlines()[2:]
    return [[cell.strip() for cell in row.strip("|").split("|")] for row in rows]


def names(cells: list[str]) -> set[str]:
    return {name for cell in cells for name in re.findall(r"`([a-z0-9]+)`", cell)}


def test_programs():
    rows = table("| program | cell, `--format` | deck, `--deck` | what is read back |")
    assert names([row[1] for row in rows]) == set(FORMATS)
    assert names([row[2] for row in rows]) == set(DECK_NAMES)
    for row in rows[:-1]:
        for cell in row[1:]:
            assert not cell or re.search(r": (run|real|manual)", cell), cell


def test_schedulers():
    assert names([row[1] for row in table("| scheduler | `--scheduler` |")]) == set(SCHEDULERS)


def test_site_settings_are_all_named():
    block = README.split("```toml", 1)[1].split("```", 1)[0]
    assert [key for key in SITE_KEYS if not re.search(rf"\b{key}\b", block)] == []
