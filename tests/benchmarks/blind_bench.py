"""Blind fault bench: python tests/benchmarks/blind_bench.py [SETS PER FAULT] [SEED] [--sets FOLDER ...] [--case ID]

Faults injected by code that was written without knowledge of how `collect` judges, from the list of faults and the documented
meaning of the finding codes. Prints one table, the false alarms on clean sets, and every missed or mislabelled case with the id
that makes it again. `--sets` names folders of more run folders of real outputs; those in tests/data/sets are always there.
"""

from __future__ import annotations

import argparse
import os
import sys
import time
import zlib
from collections import Counter, defaultdict
from functools import cache
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
os.environ.setdefault("OMP_NUM_THREADS", "1")
sys.path.insert(0, str(Path(__file__).parents[1]))

import numpy as np
import support.blind.cells
import support.blind.files  # noqa: F401  (registers its faults)
from support.blind.clean import DISGUISES, disguised
from support.blind.faults import NUMBERS
from support.blind.judge import CONSEQUENCES, Seen, Verdict, inject, judge, look, mends, moved
from support.blind.sets import MANIFEST, StrainSet, real_set, synthetic_set
from support.groups import LAUE_CLASSES

DATA = Path(__file__).parents[1] / "data"
WORDS = ("named", "outlier", "mislabelled", "missed", "no trace", "no effect")
#: synthetic sets of each Laue class and kind from which a case draws
POOL = 4
#: tries to make a fault in some set before it is given up
TRIES = 12


class Bench:
    """Clean sets, what the commands say of them, and cases by id."""

    def __init__(self, folders: list[Path], seed: int) -> None:
        self.seed = seed
        self.real = {path.name: path for folder in folders for path in _runs(folder)}
        self._clean: dict[str, Seen] = {}

    @cache  # noqa: B019  (one bench a process)
    def set_of(self, name: str) -> StrainSet:
        """A clean set by name: CLASS~SEED:KIND, or the folder name of a real one."""
        if name in self.real:
            return real_set(self.real[name])
        laue, _, rest = name.partition("~")
        number, _, kind = rest.partition(":")
        return synthetic_set(laue, int(number), kind)

    def names(self, kinds: frozenset[str]) -> list[list[str]]:
        """Names of the sets of each kind in which a fault can be made."""
        pools = [list(self.real)] if "real" in kinds and self.real else []
        for kind in sorted(kinds - {"real"}):
            pools.append([f"{laue}~{self.seed * 100 + k}:{kind}" for laue in LAUE_CLASSES for k in range(POOL)])
        return pools

    def clean(self, name: str, without: tuple[str, ...] = ()) -> Seen:
        """What is said of the clean set, fitted without some jobs."""
        key = f"{name} {without}"
        if key not in self._clean:
            self._clean[key] = look(self.set_of(name), drop=without)
        return self._clean[key]

    def case(self, faults: tuple[str, ...], number: int, keep: Path | None = None) -> tuple[str, list[Verdict]] | None:
        """Case `number` of one or two faults: name of its set and a verdict for each fault."""
        rng = np.random.default_rng([self.seed, number, *(zlib.crc32(x.encode()) for x in faults)])
        kinds = frozenset.intersection(*(NUMBERS[x][1] for x in faults))
        pools = self.names(kinds)
        for _ in range(TRIES if pools else 0):
            pool = pools[int(rng.integers(len(pools)))]
            name = str(rng.choice(pool))
            made = inject(self.set_of(name), faults, rng)
            if made is None:
                continue
            bad, done = made
            seen, clean = look(bad, keep=keep), self.clean(name)
            unused = tuple(x for x in bad.labels if x not in seen.used)
            expected = self.clean(name, unused)
            verdicts = [judge(bad, one, seen, clean, expected, tuple(x for x in done if x is not one)) for one in done]
            for verdict in verdicts:
                if verdict.word == "named" and verdict.injected.remedy and bad.kind == "table" and len(done) == 1:
                    wrong = mends(bad, verdict.injected, seen, clean)
                    verdict.word, verdict.said = ("mislabelled", (wrong, *verdict.said)) if wrong else ("named", verdict.said)
            return name, verdicts
        return None


def _runs(folder: Path) -> list[Path]:
    if (folder / MANIFEST).is_file():
        return [folder]
    return sorted(path for path in folder.iterdir() if (path / MANIFEST).is_file()) if folder.is_dir() else []


def false_alarms(bench: Bench) -> tuple[list[str], list[str]]:
    """Rows of the table of clean sets, and the alarms in words."""
    sets, alarms, fits, others, words = Counter(), Counter(), Counter(), Counter(), []
    for name in [*bench.real, *(x for pool in bench.names(frozenset(("xyz", "table"))) for x in pool)]:
        work, seen = bench.set_of(name), bench.clean(name)
        row = f"{work.kind}, {work.plan.symmetry.laue_class}" if work.real else name.partition("~")[0]
        sets[row] += 1
        wrong = sorted(f for f in seen.findings if f[0] not in CONSEQUENCES)
        alarms[row] += bool(seen.trouble) or any(f in seen.collected for f in wrong)
        fits[row] += any(f not in seen.collected for f in wrong)
        others[row] += any(f[0] in CONSEQUENCES for f in seen.findings)
        words += [f"- {name}: {f[0]} ({f[2]}): {f[3]}" for f in wrong] + [f"- {name}: {seen.trouble}"] * bool(seen.trouble)
    for name in bench.real:
        plain, row = bench.clean(name), f"{bench.set_of(name).kind}, in disguise"
        known = {(f[0], f[2]) for f in plain.findings}
        for k, disguise in enumerate(DISGUISES):
            seen = look(disguised(bench.set_of(name), disguise, np.random.default_rng([bench.seed, k])))
            new = sorted(f for f in seen.findings if (f[0], f[2]) not in known)
            size, shift = moved(plain, seen)
            sets[row] += 1
            alarms[row] += bool(seen.trouble) or size > 1e-3 or any(f in seen.collected for f in new)
            fits[row] += any(f not in seen.collected for f in new)
            words += [f"- {name}, {disguise}: {f[0]} ({f[2]}): {f[3]}" for f in new]
            words += [f"- {name}, {disguise}: {seen.trouble} {shift}"] * (bool(seen.trouble) or size > 1e-3)
    return [f"| {row} | {sets[row]} | {alarms[row]} | {fits[row]} | {others[row]} |" for row in sets], words


def details(identity: str, name: str, verdict: Verdict) -> str:
    """One case in words."""
    jobs = ", ".join(verdict.injected.labels[:6])
    said = "".join(f"\n    - {line[:400]}" for line in verdict.said[:6])
    blamed = f"; healthy jobs refused: {', '.join(verdict.blamed)}" if verdict.blamed else ""
    return f"- **{verdict.word}** `{identity}` in {name}: {jobs}: {verdict.injected.note}; {verdict.shift}{blamed}{said}"


def run(bench: Bench, per_fault: int) -> None:
    """The whole bench on standard output."""
    begun, table, extra, cases = time.time(), defaultdict(Counter), Counter(), []
    faults = list(NUMBERS)
    rng = np.random.default_rng([bench.seed, 7])
    plan = [((x,), k) for x in faults for k in range(per_fault)]
    plan += [((x, str(rng.choice(faults))), k) for x in faults for k in range(per_fault // 2)]
    for names, number in plan:
        found = bench.case(names, number)
        if found is None:
            continue
        for fault, verdict in zip(names, found[1], strict=True):
            table[fault, len(names)][verdict.word] += 1
            extra[fault] += bool(verdict.blamed)
            if verdict.word in ("missed", "no trace", "mislabelled", "outlier") or verdict.blamed:
                cases.append(((fault, verdict.word), details(f"{' + '.join(names)} #{number}", found[0], verdict)))
    print("| fault | " + " | ".join(f"{w} | two" for w in WORDS) + " | healthy job refused |")
    print("|---" * (2 * len(WORDS) + 2) + "|")
    for fault in faults:
        cells = [f"{table[fault, 1][w]} | {table[fault, 2][w]}" for w in WORDS]
        print(f"| {fault} | " + " | ".join(cells) + f" | {extra[fault]} |")
    total = {(w, n): sum(table[f, n][w] for f in faults) for w in WORDS for n in (1, 2)}
    print("| all | " + " | ".join(f"{total[w, 1]} | {total[w, 2]}" for w in WORDS) + f" | {sum(extra.values())} |")
    rows, words = false_alarms(bench)
    print("\n| clean sets | sets | false alarms of collect | of fit | of the cell and the set |\n" + "|---" * 5 + "|")
    print("\n".join(rows))
    print(f"\nseed {bench.seed}, {per_fault} sets a fault, real sets: {', '.join(bench.real)}; {time.time() - begun:.0f} s")
    print("\n## False alarms\n\n" + "\n".join(words))
    for word in ("missed", "mislabelled", "no trace", "outlier", "named"):
        print(f"\n## {word.capitalize()}{' (a healthy job refused)' if word == 'named' else ''}\n")
        print("\n".join(text for (_, kind), text in sorted(cases, key=lambda c: c[0]) if kind == word))


def main() -> None:
    """Command line."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("per_fault", nargs="?", type=int, default=12)
    parser.add_argument("seed", nargs="?", type=int, default=1)
    parser.add_argument("--sets", nargs="*", type=Path, default=[])
    parser.add_argument("--case", help="one case by its id, such as 'sign, one #3'")
    parser.add_argument("--keep", type=Path, help="write the run folder of the case here")
    options = parser.parse_args()
    bench = Bench([DATA / "sets", *options.sets], options.seed)
    if options.case:
        names, _, number = options.case.rpartition(" #")
        found = bench.case(tuple(names.split(" + ")), int(number), options.keep)
        print("cannot be made" if found is None else "\n".join(details(options.case, found[0], v) for v in found[1]))
    else:
        run(bench, options.per_fault)


if __name__ == "__main__":
    main()
