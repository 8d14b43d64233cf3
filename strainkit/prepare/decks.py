"""Input decks: folders of jinja2 templates with a deck.toml, shipped ones and the user's own, rendered in a sandbox.

A deck folder holds `deck.toml` (the facts of the program, and every number that may be set with its default), `steps.sh`
(how a job script makes an attempt's inputs, runs the program and tells that it finished) and one template for each input
file. A single template file is a deck too when the settings file says `program = NAME` under [deck]: it takes the place
of the first input file of that shipped deck.
"""

from __future__ import annotations

import shlex
import tomllib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from strainkit.errors import InputError, UsageError
from strainkit.prepare.geometry import numbers
from strainkit.prepare.settings import nearest
from strainkit.shipped import shipped_folder

__all__ = ["DECK_NAMES", "Deck", "load_deck", "render"]

#: shipped decks, by the names that --deck takes
DECK_NAMES = ("qe", "vasp", "abinit", "cp2k", "castep", "aims", "gpaw")
_ALIASES = {"espresso": "qe", "quantum-espresso": "qe", "quantumespresso": "qe", "pw": "qe", "fhi-aims": "aims"}
_PROGRAM_KEYS = {"name", "command", "geometry", "pseudopotentials", "keep", "kmesh_odd", "right_handed"}
#: keys of [deck] that are not numbers of one deck
_COMMON = ("kmesh", "program")


@dataclass(frozen=True)
class Deck:
    """An input deck with the numbers that it will be rendered with.

    Attributes
    ----------
    name : str
        Shipped name, or path of the user's folder or file.
    program : dict
        The [program] table of its deck.toml.
    values : dict
        The [deck] table, overridden by the user's settings.
    templates : dict
        Name of the input file -> path of its template.
    steps : path or None
        Template of the shell functions for job scripts.
    """

    name: str
    program: dict[str, Any]
    values: dict[str, Any]
    templates: dict[str, Path]
    steps: Path | None


def load_deck(name: str, wanted: Mapping[str, Any], source: str = "") -> Deck:
    """Find a deck and put the user's numbers into it.

    Parameters
    ----------
    name : str
        Shipped name, folder or template file.
    wanted : mapping
        The [deck] table of the settings file.
    source : str
        That file, for messages.

    Raises
    ------
    UsageError
        No such deck.
    InputError
        A deck that is damaged, or a setting that it does not know.
    """
    path = Path(name)
    known = _ALIASES.get(name.lower(), name.lower())
    template = None
    if known in DECK_NAMES:
        folder = shipped_folder("templates") / "decks" / known
    elif path.is_dir():
        folder = path
    elif path.is_file():
        template = path
        folder = _like(path, wanted)
    else:
        shipped = shipped_folder("templates") / "decks"
        remedy = f"Choose from {', '.join(DECK_NAMES)} (in {shipped}), or name a folder or file of your own."
        raise UsageError(f"no such deck: {name!r}", "--deck", remedy)
    facts = _facts(folder)
    templates = {p.name: p for p in sorted(folder.iterdir()) if p.is_file() and _is_template(p)}
    if not templates:
        raise InputError("no template beside deck.toml", folder)
    own: set[str] = set()
    if template is not None:
        first = next(iter(templates))
        name_inside = template.name.removesuffix(".j2")
        same_kind = [n for n in templates if n.removesuffix(".j2") == name_inside or Path(n).suffix == Path(name_inside).suffix]
        first = name_inside if name_inside in templates else next(iter(same_kind), first)
        templates[first] = template
        own = _mentioned(template)
    values = dict(facts["deck"])
    for key, value in wanted.items():
        if key not in values and key not in own and key not in _COMMON:
            known_keys = [*values, *own, *_COMMON]
            raise InputError(f"unknown key {key!r} in [deck] for the deck {known}", source, nearest(key, known_keys))
        default = values.get(key)
        if default is not None and not _same_kind(value, default):
            raise InputError(f"[deck] {key} = {value!r} must be like {default!r}", source)
        values[key] = float(value) if isinstance(default, float) else value
    steps = folder / "steps.sh"
    return Deck(known if known in DECK_NAMES else name, facts["program"], values, templates, steps if steps.is_file() else None)


def _is_template(path: Path) -> bool:
    return path.name not in ("deck.toml", "steps.sh") and not path.name.startswith(".") and not path.name.endswith("~")


def _like(path: Path, wanted: Mapping[str, Any]) -> Path:
    program = str(wanted.get("program", "")).lower()
    program = _ALIASES.get(program, program)
    if program not in DECK_NAMES:
        raise InputError(
            "a deck of one file needs to know its program",
            path,
            f'Set program = "NAME" under [deck] in the settings file; NAME is one of {", ".join(DECK_NAMES)}.',
        )
    return shipped_folder("templates") / "decks" / program


def _facts(folder: Path) -> dict[str, dict[str, Any]]:
    path = folder / "deck.toml"
    try:
        facts = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError:
        raise InputError("no deck.toml in this deck", folder, "Copy a shipped deck and change the copy.") from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"not valid TOML ({error})", path) from None
    if set(facts) != {"program", "deck"}:
        raise InputError("needs the tables [program] and [deck], and no others", path)
    unknown = set(facts["program"]) - _PROGRAM_KEYS
    if unknown:
        raise InputError(f"unknown key {min(unknown)!r} in [program]", path, nearest(min(unknown), _PROGRAM_KEYS))
    missing = {"name", "command", "geometry"} - set(facts["program"])
    if missing:
        raise InputError(f"[program] has no {min(missing)!r}", path)
    return facts


def _same_kind(value: Any, default: Any) -> bool:
    if isinstance(default, bool) or isinstance(value, bool):
        return isinstance(default, bool) and isinstance(value, bool)
    if isinstance(default, float):
        return isinstance(value, int | float)
    if isinstance(default, str) and isinstance(value, dict):
        return all(isinstance(item, str) for item in value.values())
    if isinstance(value, str) and "\n" in value:
        return False
    return isinstance(value, type(default))


def _mentioned(path: Path) -> set[str]:
    """Names X that a template uses as deck.X: what its user may set."""
    from jinja2 import nodes

    try:
        tree = environment().parse(path.read_text(encoding="utf-8"))
    except Exception:  # said with line and field when it is rendered
        return set()
    return {
        found.attr for found in tree.find_all(nodes.Getattr) if isinstance(found.node, nodes.Name) and found.node.name == "deck"
    }


def environment() -> Any:
    """The sandbox in which templates run: no access to Python's insides, and no silent blanks."""
    from jinja2 import FileSystemLoader, StrictUndefined
    from jinja2.sandbox import ImmutableSandboxedEnvironment

    sandbox = ImmutableSandboxedEnvironment(
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
        loader=FileSystemLoader(shipped_folder("templates") / "jobs"),
    )
    sandbox.filters["numbers"] = numbers
    sandbox.filters["shell"] = lambda text: shlex.quote(str(text))
    return sandbox


def render(path: Path, fields: Mapping[str, Any], more: Mapping[str, Callable[..., Any]] | None = None) -> str:
    """Text of a template.

    Raises
    ------
    InputError
        With the line and the field when a field is unknown or missing, or the template is not valid.
    """
    from jinja2 import TemplateError, TemplateSyntaxError, UndefinedError

    try:
        source = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"cannot be read ({error})", path) from None
    sandbox = environment()
    sandbox.filters.update(more or {})
    try:
        code = sandbox.compile(source, filename=str(path))
        return str(sandbox.template_class.from_code(sandbox, code, sandbox.make_globals(None)).render(dict(fields)))
    except TemplateSyntaxError as error:
        raise InputError(f"line {error.lineno}: {error.message}", error.filename or path) from None
    except UndefinedError as error:
        missing = str(error.message).split("'")
        word = (
            missing[3] if "has no attribute" in str(error.message) else missing[1] if len(missing) > 1 else str(error.message)
        )
        known = [*fields, *(f"deck.{key}" for key in fields.get("deck", ()))]
        raise InputError(f"line {_line(error, path)}: no field {word!r}", path, nearest(word, known)) from None
    except InputError:
        raise
    except (TemplateError, ArithmeticError, TypeError, ValueError, LookupError, AttributeError) as error:
        raise InputError(f"line {_line(error, path)}: {type(error).__name__}: {error}", path) from None


def _line(error: BaseException, path: Path) -> int:
    """Line of the template where an error arose: jinja2 rewrites the traceback to the template's own lines."""
    line, frame = 0, error.__traceback__
    while frame is not None:
        if frame.tb_frame.f_code.co_filename == str(path):
            line = frame.tb_lineno
        frame = frame.tb_next
    return line
