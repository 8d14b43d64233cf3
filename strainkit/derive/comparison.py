"""Crystals side by side: which differences can be told from noise, which ranking is right, what forms from what."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from strainkit.derive.differences import Column, Difference, Ranking, column_of, lettered, ranked, tested
from strainkit.derive.doubts import doubts_about
from strainkit.derive.formation import Composition, Reaction, energies_of
from strainkit.derive.member import Member, member_of_fit, named_apart
from strainkit.derive.quantities import QUANTITIES, Quantity
from strainkit.derive.sameaxes import common_names, obstacle
from strainkit.derive.significance import LEVEL
from strainkit.derive.spread import WithError
from strainkit.errors import UsageError
from strainkit.findings import Finding, finding
from strainkit.fit.judge import instability
from strainkit.fit.result import Fit

__all__ = ["MOST", "Comparison", "compare_crystals"]

#: most crystals in one comparison
MOST = 50


@dataclass(frozen=True)
class Comparison:
    """Several crystals side by side.

    Attributes
    ----------
    members : tuple of Member
    moduli : tuple of Column
    constants : tuple of ((members), (columns))
        Groups of members whose constants mean the same; values of the others are None.
    apart : dict
        Member -> why its constants are not set against those of others.
    differences : tuple of Difference
        All pairs, or every member against the baseline.
    baseline : int or None
    ranking : Ranking
    compositions, reactions
        See `strainkit.derive.formation`.
    findings : tuple of Finding
        Of the comparison; those of the members are with them.
    """

    members: tuple[Member, ...]
    moduli: tuple[Column, ...]
    constants: tuple[tuple[tuple[int, ...], tuple[Column, ...]], ...]
    apart: dict[int, str]
    differences: tuple[Difference, ...]
    baseline: int | None
    ranking: Ranking
    compositions: tuple[Composition | None, ...]
    reactions: tuple[Reaction, ...]
    findings: tuple[Finding, ...]

    @property
    def labels(self) -> list[str]:
        """Names of the members."""
        return [m.label for m in self.members]

    @property
    def columns(self) -> list[Column]:
        """Moduli, then constants."""
        return [*self.moduli, *(column for _, columns in self.constants for column in columns)]

    @property
    def tests(self) -> int:
        """How many differences were tested."""
        return sum(d.p_value is not None for d in self.differences)

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready: what `strainkit compare --json` prints."""
        names = self.labels
        return {
            "schema": "strainkit/comparison/1",
            "crystals": [
                {**m.to_dict(), "formula_unit": None if c is None else c.formula, "softest_shear": _softest(m)}
                for m, c in zip(self.members, self.compositions, strict=True)
            ],
            "level": 1.0 - LEVEL,
            "tests": self.tests,
            "moduli": [column.to_dict(names) for column in self.moduli],
            "constants": [
                {"crystals": [names[i] for i in group], "constants": [column.to_dict(names) for column in columns]}
                for group, columns in self.constants
            ],
            "constants_not_compared": [{"crystal": names[i], "reason": reason} for i, reason in self.apart.items()],
            "baseline": None if self.baseline is None else names[self.baseline],
            "differences": [d.to_dict(names) for d in self.differences],
            "ranking": self.ranking.to_dict(names),
            "energies": [r.to_dict(names) for r in self.reactions],
            "findings": [f.to_dict() for f in self.findings],
        }


def _softest(member: Member) -> dict[str, Any] | None:
    if member.moduli is None:
        return None
    return member.moduli.ends["shear_GPa"][0].to_dict(member.elastic.frame.rotation)


def compare_crystals(
    crystals: Sequence[Member | Fit],
    by: str | None = None,
    baseline: str | None = None,
    left_out: Mapping[str, str] | None = None,
) -> Comparison:
    """Compare crystals.

    Parameters
    ----------
    crystals : sequence of Member or Fit
        Members come from `member_of_fit` and `member_of_file`, and know energies and settings; a fit alone has none. Labels
        are made different.
    by : str, optional
        What to rank by: a key of `QUANTITIES`, or a constant such as "C11"; "young" when left out. Members that do not have it
        are left out of the ranking with their reasons.
    baseline : str, optional
        Label, or folder or file as given, of the member that the others are held against; all pairs when left out.
    left_out : mapping, optional
        Crystals that were wanted but have no tensor -> why; each becomes a finding.

    Raises
    ------
    UsageError
        Fewer than two members, one of them twice, an unknown quantity or baseline, a quantity that no two members have.
    """
    if len(crystals) < 2:
        raise UsageError("a comparison needs at least two crystals", "compare", "Give two or more run folders or files.")
    members = named_apart([member_of_fit(c) if isinstance(c, Fit) else c for c in crystals])
    base = None if baseline is None else _found(members, baseline)
    moduli = _moduli_columns(members)
    groups, apart = _groups(members)
    shared = [(group, _constant_columns(members, group)) for group in groups]
    every = [*moduli, *(column for _, columns in shared for column in columns)]
    differences = tested(every, len(members), base)
    compositions, reactions, doubts = energies_of(members)
    absent = [finding("not-compared", place, f"left out of the comparison: {why}") for place, why in (left_out or {}).items()]

    def finished(columns: Sequence[Column]) -> tuple[Column, ...]:
        return tuple(columns) if base is not None else tuple(lettered(column, differences) for column in columns)

    return Comparison(
        members=tuple(members),
        moduli=finished(moduli),
        constants=tuple((group, finished(columns)) for group, columns in shared),
        apart=apart,
        differences=tuple(differences),
        baseline=base,
        ranking=_ranking(members, every, by, apart),
        compositions=tuple(compositions),
        reactions=tuple(reactions),
        findings=(*absent, *doubts_about(members, moduli), *doubts),
    )


def _found(members: Sequence[Member], baseline: str) -> int:
    for names in ([m.label for m in members], [m.place.rstrip("/") for m in members]):
        if names.count(baseline.rstrip("/")) == 1:
            return names.index(baseline.rstrip("/"))
    raise UsageError(f"no crystal {baseline!r} here", "--baseline", f"Use one of {', '.join(m.label for m in members)}.")


def _ranking(members: Sequence[Member], columns: Sequence[Column], by: str | None, apart: Mapping[int, str]) -> Ranking:
    """The order of the members that have a quantity; of a constant, the largest group in which it means the same."""
    wanted = [column for column in columns if (by or "young") in (column.quantity.key, column.quantity.name)]
    column = max(wanted, key=_known, default=None)
    lacking = dict(apart)
    if column is not None:
        lacking = {i: _lack(members[i], column, apart.get(i)) for i, value in enumerate(column.values) if value is None}
        if by is None or _known(column) > 1:
            return ranked(column, lacking)
    keys = list(dict.fromkeys(c.quantity.key for c in columns if _known(c) > 1))
    remedy = f"Use one of {', '.join(keys)}." if keys else "No two of these crystals share a quantity."
    why = "; ".join(f"{members[i].label}: {reason}" for i, reason in lacking.items())
    raise UsageError(f"no two crystals can be ranked by {by!r}" + (f" ({why})" if why else ""), "--by", remedy)


def _known(column: Column) -> int:
    return sum(value is not None for value in column.values)


def _lack(member: Member, column: Column, apart: str | None) -> str:
    """Why a member has no value of a quantity."""
    if column.quantity in QUANTITIES:
        return f"no moduli, {instability(member.elastic.moduli)}"
    return apart or f"its {column.quantity.words} is not that of the others"


def _moduli_columns(members: Sequence[Member]) -> list[Column]:
    every = [None if m.moduli is None else m.moduli.values for m in members]
    return [column_of(members, q, [None if values is None else values[q.name] for values in every]) for q in QUANTITIES]


def _groups(members: Sequence[Member]) -> tuple[list[tuple[int, ...]], dict[int, str]]:
    """Members whose constants mean the same, and why the others have no partner."""
    groups: list[list[int]] = []
    why: dict[int, str] = {}
    for i, member in enumerate(members):
        reasons = [obstacle(members[group[0]], member) for group in groups]
        if "" in reasons:
            groups[reasons.index("")].append(i)
        else:
            why[i] = reasons[0] if reasons else ""
            groups.append([i])
    alone = [group[0] for group in groups if len(group) == 1]
    return [tuple(group) for group in groups if len(group) > 1], {i: why[i] for i in alone if why[i]}


def _constant_columns(members: Sequence[Member], group: tuple[int, ...]) -> list[Column]:
    tables = {}
    for i in group:
        e = members[i].elastic
        assert e.naming is not None
        named = e.waves.rotated(e.naming, "named")
        tables[i] = (named.voigt, named.standard_errors)
    columns = []
    for name in common_names([members[i] for i in group]):
        at = int(name[1]) - 1, int(name[2]) - 1
        values: list[WithError | None] = [None] * len(members)
        for i, (voigt, errors) in tables.items():
            values[i] = WithError(float(voigt[at]), None if errors is None else float(errors[at]))
        columns.append(column_of(members, Quantity(f"{name}_GPa", name, "GPa", name), values))
    return columns
