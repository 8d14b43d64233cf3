"""Campaigns on a terminal: what will be written, where the jobs stand, what came of every crystal."""

from __future__ import annotations

import csv
import io
import json
import math
import shlex
from collections.abc import Mapping, Sequence
from pathlib import Path
from types import MappingProxyType
from typing import Any

from strainkit.errors import counted
from strainkit.findings import CODES
from strainkit.prepare.assemble import Estimate, Made
from strainkit.present.text import columns, heading, paragraph
from strainkit.run.campaign import Refusal

__all__ = [
    "doubts_lines",
    "estimate_text",
    "few",
    "made_text",
    "next_text",
    "not_taken_text",
    "screening_files",
    "size_text",
    "tally_text",
    "who_has",
]

#: names in a row on a terminal
_NAMED = 3
#: problems shown on a terminal; the JSON has them all
_SHOWN = 20


def size_text(size: float) -> str:
    """Bytes in a handy unit."""
    power = next((p for p in (1, 2) if size < 999.5 * 1000**p), 3)
    return f"{size / 1000**power:.3g} {('kB', 'MB', 'GB')[power - 1]}"


def estimate_text(estimate: Estimate) -> str:
    """What is about to be written, on one line."""
    kept = f"; {counted(estimate.kept, 'crystal')} there already" if estimate.kept else ""
    if not estimate.crystals:
        return f"nothing to write{kept}"
    return (
        f"{counted(estimate.crystals, 'crystal')}, {counted(estimate.jobs, 'job')}: {counted(estimate.files, 'file')}, "
        f"about {size_text(estimate.bytes)} of disk{kept}"
    )


def not_taken_text(paths: Sequence[Path]) -> str:
    """Files of a folder that no cell was sought in, on one line."""
    names = few([path.name for path in paths])
    return (
        f"not taken for structures by their names: {counted(len(paths), 'file')} ({names}); give one by itself to have it read"
    )


def made_text(made: Made, out: Path | None) -> str:
    """The campaign, its classes, the refused cells with reasons, and how its jobs are submitted."""
    estimate = made.estimate
    place = "" if out is None else f" in {out}"
    count = estimate.crystals + estimate.kept if made.campaign is None else len(made.campaign.members)
    if made.added:
        title = f"Campaign{place}: {counted(made.added, 'crystal')} added, {count} in all"
    else:
        title = f"Campaign of {counted(count, 'crystal')}{place}"
    lines = [heading(title), f"  {estimate_text(estimate)}"]
    lines.append("  Laue classes: " + ", ".join(f"{count} x {name}" for name, count in estimate.laue_classes.items()))
    lines += doubts_lines(who_has(estimate.findings))
    if estimate.same_files:
        groups = few([" = ".join(group) for group in estimate.same_files])
        lines.append(paragraph(f"files of the same content, computed more than once: {groups}", "  "))
    if made.submit and out is not None:
        lines += ["  submit it yourself:", f"    cd {shlex.quote(str(out))} && {made.submit}"]
    return "\n".join([*lines, *_refused_lines(made.refused)])


def _refused_lines(refused: Sequence[Refusal]) -> list[str]:
    if not refused:
        return []
    lines = ["", heading(f"{counted(len(refused), 'cell')} cannot be used")]
    lines += [paragraph(f"{r.source}: {r.reason}", "  ") for r in refused[:_SHOWN]]
    return lines + ([f"  and {len(refused) - _SHOWN} more (see --json)"] if len(refused) > _SHOWN else [])


def tally_text(
    title: str,
    counts: Mapping[str, tuple[int, str]],
    problems: Mapping[str, str],
    notes: Sequence[str] = (),
    doubts: Mapping[str, Sequence[str]] = MappingProxyType({}),
) -> str:
    """A title, counts with their meaning, doubts (see `who_has`), and the crystals that need a look, each with its reason."""
    lines = [heading(title)]
    if counts:
        lines.append(columns([[word, str(count), meaning] for word, (count, meaning) in counts.items()], left=1))
    lines += [*(paragraph(note, "  ") for note in notes), *doubts_lines(doubts)]
    if problems:
        lines += ["", heading(f"{counted(len(problems), 'crystal')} to look at")]
        lines += [paragraph(f"{name}: {reason}", "  ") for name, reason in list(problems.items())[:_SHOWN]]
        if len(problems) > _SHOWN:
            lines.append(f"  and {len(problems) - _SHOWN} more (see --json)")
    return "\n".join(lines)


def who_has(codes: Mapping[str, Sequence[str]]) -> dict[str, list[str]]:
    """Crystal -> codes of its findings, turned round: code -> crystals, the gravest and commonest codes first."""
    found: dict[str, list[str]] = {}
    for name, own in codes.items():
        for code in dict.fromkeys(own):
            found.setdefault(code, []).append(name)
    order = ("error", "warning", "info")
    return dict(sorted(found.items(), key=lambda item: (order.index(CODES[item[0]][0]), -len(item[1]))))


def doubts_lines(found: Mapping[str, Sequence[str]]) -> list[str]:
    """Every code with the number of crystals that have it, and the names of a few; see `who_has`."""
    return [
        paragraph(f"{CODES[code][0]} {code}: {counted(len(names), 'crystal')} ({few(names)})", "  ")
        for code, names in found.items()
    ]


def few(names: Sequence[str]) -> str:
    """The first names of a long row, and how many more there are."""
    rest = len(names) - _NAMED
    return ", ".join(names[:_NAMED]) + (f" and {rest} more" if rest > 0 else "")


def next_text(again: int, folder: Path, scripted: bool, asked: bool, written: Mapping[str, Any] | None) -> list[str]:
    """What to type to run jobs again."""
    if not again:
        return []
    place = shlex.quote(str(folder))
    lines = ["", f"  worth another run: {counted(again, 'job')}"]
    if written:
        lines += [f"  wrote {' '.join(written['lists'])}; submit them yourself:", f"    cd {place} && {written['submit']}"]
    elif scripted:
        ask = "" if asked else " --queue"
        lines += ["  to write a list and a script for them:", f"    strainkit progress {place}{ask} --resubmit"]
    return lines


def screening_files(rows: Sequence[Mapping[str, Any]], header: Sequence[str]) -> dict[str, str]:
    """screening.csv and screening.jsonl: unknown numbers are empty or null, all digits are kept."""
    buffer = io.StringIO()
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow(header)
    known = [{name: _known(row[name]) for name in header} for row in rows]
    for row in known:
        writer.writerow(["" if row[name] is None else row[name] for name in header])
    lines = "".join(json.dumps(row, ensure_ascii=False, allow_nan=False) + "\n" for row in known)
    return {"screening.csv": buffer.getvalue(), "screening.jsonl": lines}


def _known(value: Any) -> Any:
    return None if isinstance(value, float) and not math.isfinite(value) else value
