"""The settings file: TOML with the tables [deck], [pseudopotentials] and [site], every key of them checked.

[deck]                       # numbers of the calculation; the names are those of the deck's own deck.toml
ecutwfc = 60.0
kmesh = [8, 8, 8]            # in place of --kspacing

[pseudopotentials]           # element = name; folder where they are on the cluster
folder = "/opt/pseudo"
Si = "Si.upf"

[engine]                     # settings of a local engine, for prepare --extend RUN --finer
accuracy = 0.01

[site]                       # what the cluster wants; a key that is not there leaves no line in the script
account = "a1234"
walltime = "12:00:00"
"""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from strainkit.errors import InputError

__all__ = ["SITE_KEYS", "Settings", "nearest", "read_settings", "seconds"]

#: site key -> (type, meaning, default)
SITE_KEYS: dict[str, tuple[type, str, Any]] = {
    "account": (str, "account or project that pays", None),
    "partition": (str, "partition or queue", None),
    "qos": (str, "quality of service (Slurm)", None),
    "walltime": (str, "time limit of one task, HH:MM:SS or D-HH:MM:SS", None),
    "memory": (str, "memory of one task on each node, such as 16GB", None),
    "nodes": (int, "nodes of one task", 1),
    "tasks": (int, "MPI processes of one task", 1),
    "threads": (int, "OpenMP threads of each process", 1),
    "throttle": (int, "most tasks running at once", None),
    "array_limit": (int, "most tasks of one job array (Slurm: MaxArraySize less one); 1000 if not set", None),
    "bundle": (int, "jobs that one task runs one after another", 1),
    "grace": (int, "seconds before the time limit at which a task stops and saves", 120),
    "modules": (list, "modules to load", ()),
    "setup": (list, "shell lines to run before the program", ()),
    "launcher": (str, "what stands before the program, such as srun", None),
    "command": (str, "the program, when it is not the deck's", None),
    "scratch": (str, "node-local folder to compute in; the shell expands it there", None),
    "parallel_environment": (str, "name of the parallel environment (Grid Engine)", None),
    "extra": (list, "further directives, such as --gres=gpu:1", ()),
}

_TABLES = ("deck", "pseudopotentials", "engine", "site")
_WALLTIME = re.compile(r"(?:(\d+)-)?(\d{1,4}):(\d\d):(\d\d)")
_MEMORY = re.compile(r"\d+(\.\d+)?[KMGT]B")


@dataclass(frozen=True)
class Settings:
    """What the user set.

    Attributes
    ----------
    deck : dict
        Numbers of the calculation.
    pseudopotentials : dict
        Element -> name.
    folder : str
        Where pseudopotentials are on the cluster; empty when not said.
    engine : dict
        Settings of a local engine at finer settings.
    site : dict
        Every key of `SITE_KEYS`, with its default where it was not set.
    source : str
        The files, for messages.
    """

    deck: dict[str, Any] = field(default_factory=dict)
    pseudopotentials: dict[str, str] = field(default_factory=dict)
    folder: str = ""
    engine: dict[str, Any] = field(default_factory=dict)
    site: dict[str, Any] = field(default_factory=lambda: {key: default for key, (_, _, default) in SITE_KEYS.items()})
    source: str = ""


def read_settings(paths: Sequence[Path]) -> Settings:
    """Read settings files; a later one overrides an earlier one key by key.

    Raises
    ------
    InputError
        Not readable, not TOML, an unknown key (with the nearest known one), or a value of the wrong kind.
    """
    tables: dict[str, dict[str, Any]] = {name: {} for name in _TABLES}
    for path in paths:
        for name, table in _load(path).items():
            if name not in _TABLES or not isinstance(table, dict):
                raise InputError(f"unknown table or key {name!r}", path, f"Known tables: {', '.join(_TABLES)}.")
            if name == "site":
                table = {key: _checked(key, value, path) for key, value in table.items()}
            if name == "pseudopotentials":
                _check_pseudopotentials(table, path)
            tables[name].update(table)
    pseudopotentials = tables["pseudopotentials"]
    folder = str(pseudopotentials.pop("folder", ""))
    defaults = Settings()
    return Settings(
        deck=tables["deck"],
        pseudopotentials=pseudopotentials,
        folder=folder,
        engine=tables["engine"],
        site=defaults.site | tables["site"],
        source=" and ".join(map(str, paths)),
    )


def _load(path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError(error.strerror or "cannot be read", path) from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"not valid TOML ({error})", path) from None


def nearest(word: str, known: Iterable[str]) -> str:
    """A remedy for an unknown word: the nearest known one, or all of them."""
    known = list(known)
    close = difflib.get_close_matches(word, known, 1)
    return f"Did you mean {close[0]!r}?" if close else f"Known: {', '.join(known)}."


def _checked(key: str, value: Any, path: Path) -> Any:
    if key not in SITE_KEYS:
        raise InputError(f"unknown key {key!r} in [site]", path, nearest(key, SITE_KEYS))
    kind, meaning, _ = SITE_KEYS[key]
    where = f"[site] {key}"
    if kind is int:
        right = type(value) is int and value >= (0 if key == "grace" else 1)
    elif kind is list:
        right = isinstance(value, list) and all(isinstance(item, str) and "\n" not in item for item in value)
    else:
        right = isinstance(value, str) and bool(value.strip()) and "\n" not in value
    if not right:
        word = {int: "a whole number above zero", list: "a list of single lines", str: "a text of one line"}[kind]
        raise InputError(f"{where} = {value!r} must be {word} ({meaning})", path)
    if key == "walltime":
        seconds(value, path)
    if key == "memory" and not _MEMORY.fullmatch(value):
        raise InputError(f"{where} = {value!r} is no amount of memory", path, "Write it like 16GB or 900MB.")
    return value


def seconds(walltime: str, where: object = "") -> int:
    """Seconds of a time limit HH:MM:SS or D-HH:MM:SS."""
    found = _WALLTIME.fullmatch(walltime)
    total = 0
    if found:
        days, hours, minutes, rest = (int(part or 0) for part in found.groups())
        total = ((days * 24 + hours) * 60 + minutes) * 60 + rest
    if not total:
        raise InputError(f"[site] walltime = {walltime!r} is no time limit", where, "Write it as HH:MM:SS or D-HH:MM:SS.")
    return total


def _check_pseudopotentials(table: dict[str, Any], path: Path) -> None:
    from ase.data import chemical_symbols

    for key, value in table.items():
        if key != "folder" and key not in chemical_symbols[1:]:
            raise InputError(f"[pseudopotentials] {key!r} is no chemical element", path, "Keys are element symbols, or folder.")
        if not isinstance(value, str) or not value.strip() or "\n" in value:
            raise InputError(f"[pseudopotentials] {key} = {value!r} must be a text of one line", path)
