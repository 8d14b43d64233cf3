"""The fault bench: what is caught, mislabelled and missed, and what alarms on clean sets.

Clean sets of every Laue class with the fewest jobs at 1 %, at 0.5 and 1 %, with noise of 0.1 to 3 % of the typical change of
stress, without and with a reference stress; one and two faults at a time in random places and sizes
(tests/support/faultbench.py).

"As outlier": the job, its pair or the set is said not to fit, without a reason. "No effect": not seen, and no constant
moved by its error bar.

Run: python tests/benchmarks/fault_bench.py [SETS PER FAULT AND CLASS] [SEED]
"""

from __future__ import annotations

import sys
from collections import Counter, defaultdict
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent.parent))

from support.crystals import conventional
from support.faultbench import FAULTS, alarms, clean_set, inject, shift, verdict
from support.groups import LAUE_CLASSES

from strainkit.prepare.runfolder import plan_run

WORDS = ("named", "outlier", "mislabelled", "missed", "harmless")


def main() -> None:
    per_fault = int(sys.argv[1]) if len(sys.argv) > 1 else 4
    rng = np.random.default_rng(int(sys.argv[2]) if len(sys.argv) > 2 else 1)
    single: dict[str, Counter[str]] = defaultdict(Counter)
    double: dict[str, Counter[str]] = defaultdict(Counter)
    missed: dict[str, Counter[str]] = defaultdict(Counter)
    clean_alarms: Counter[str] = Counter()
    clean_count = 0
    names = list(FAULTS)
    for laue in LAUE_CLASSES:
        plans = {sizes: plan_run(conventional(laue), sizes) for sizes in ((0.01,), (0.005, 0.01))}
        for _ in range(per_fault):
            for name in names:
                sizes = list(plans)[rng.integers(2)]
                plan = plans[sizes]
                noise = 10 ** float(rng.uniform(-3, -1.5))
                clean = clean_set(laue, rng, sizes, noise, float(rng.choice([0.0, 1.0, 10.0])), plan=plan)
                found = alarms(clean)
                clean_count += 1
                clean_alarms[" ".join(sorted(set(found))) or "none"] += 1
                alone = inject(clean, [name], rng)
                assert alone is not None
                word = verdict(clean, alone)[0]
                single[name][word] += 1
                if word in ("missed", "mislabelled"):
                    missed[name][f"{laue} {word}, constants moved by {100 * shift(clean, alone):.2g} %"] += 1
                case, other = None, name
                while case is None:
                    other = str(rng.choice([n for n in names if n != name]))
                    case = inject(clean, [name, other], rng)
                for kind, result in zip((name, other), verdict(clean, case), strict=True):
                    double[kind][result] += 1
    heads = ["named", "as outlier", "mislabelled", "missed", "no effect"]
    print(f"| fault | alone: {' | '.join(heads)} | with another: {' | '.join(heads)} |")
    print("|---|" + "---|" * 10)
    for name in names:
        cells = [str(counts[name][word]) for counts in (single, double) for word in WORDS]
        print(f"| {name} | {' | '.join(cells)} |")
    totals = [str(sum(counts[name][word] for name in names)) for counts in (single, double) for word in WORDS]
    print(f"| all | {' | '.join(totals)} |")
    print(f"\nclean sets {clean_count}: {dict(clean_alarms)}")
    for name, counts in missed.items():
        print(f"  {name}: {dict(counts)}")


if __name__ == "__main__":
    main()
