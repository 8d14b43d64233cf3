"""Pseudopotential names from the settings file, checked against the elements and, where the files are here, against them."""

from __future__ import annotations

import re
from pathlib import Path

from strainkit.crystal.crystal import Crystal
from strainkit.errors import InputError
from strainkit.prepare.settings import Settings

__all__ = ["chosen_pseudopotentials"]

#: bytes of a file in which its element is named
_HEAD = 20000


def chosen_pseudopotentials(crystal: Crystal, settings: Settings, need: str, deck: str) -> dict[str, str]:
    """Element -> name for the elements of a crystal.

    Parameters
    ----------
    crystal : Crystal
    settings : Settings
    need : str
        "required", "optional" (all elements or none) or "none".
    deck : str
        For messages.

    Raises
    ------
    InputError
        When an element has no name, or its file is missing or of another element.
    """
    elements = list(dict.fromkeys(crystal.symbols))
    named = {symbol: settings.pseudopotentials[symbol] for symbol in elements if symbol in settings.pseudopotentials}
    if need == "none" or (need == "optional" and not named):
        return {}
    missing = [symbol for symbol in elements if symbol not in named]
    if missing:
        lines = ", ".join(f'{symbol} = "..."' for symbol in missing)
        raise InputError(
            f"the deck {deck} needs a pseudopotential for {', '.join(missing)}",
            settings.source or "--settings",
            f"Put under [pseudopotentials] in the settings file: {lines}",
        )
    folder = Path(settings.folder)
    if settings.folder and folder.is_absolute() and folder.is_dir():
        for symbol, name in named.items():
            _check(folder / name, symbol)
    return named


def _check(path: Path, symbol: str) -> None:
    if not path.exists():
        raise InputError(f"no such pseudopotential for {symbol}", path, "Mend [pseudopotentials] in the settings file.")
    if path.is_dir():
        return
    with path.open("rb") as file:
        head = file.read(_HEAD).decode("latin-1")
    found = _element(head)
    if found and found != symbol:
        raise InputError(f"a pseudopotential of {found}, named for {symbol}", path, "Mend [pseudopotentials].")


def _element(head: str) -> str | None:
    """Element that a UPF, PAW-XML or psp8 file says it is for; None when it does not say."""
    from ase.data import chemical_symbols

    if head.lstrip().startswith("<") or "<PP_HEADER" in head:
        found = re.search(r'\b(?:element|symbol)\s*=\s*"\s*([A-Z][a-z]?)\s*"', head) or re.search(
            r"^\s*([A-Z][a-z]?)\s+Element\s*$", head, re.M
        )
        return found[1] if found else None
    lines = head.splitlines()
    charge = re.match(r"\s*(\d+\.?\d*)\s+\d+\.?\d*\s+\d+", lines[1]) if len(lines) > 2 else None
    number = round(float(charge[1])) if charge else 0
    return chemical_symbols[number] if 0 < number < len(chemical_symbols) else None
