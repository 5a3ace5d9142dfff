"""Do consistency checks name what is planted, and nothing else? Artefacts, clean variables, short pulses.

    python tests/studies/checks.py [--planted 100] [--clean 1000] [--first-seed 0]

Of each of six artefacts 100 seeds, in which the target is bright at least once, and of a blended neighbour that varies
smoothly and a steady source in frames that are off their headers, whose targets are bright in few frames or in none; at
least 95 must carry the right concern. Of 1,000 clean variables, and of 1,000 that vary smoothly about a mean, at most 1 %
may carry any; of 100 pulses of 30 s in images of 2 min none. About a quarter of an hour on one core.
`--first-seed` takes seeds that no threshold was chosen on. Exits non-zero when short.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

from hindlight import host
from hindlight.plugin import ConsistencyCheck
from planted import PLANTED, SMOOTH, Field, clean, short_pulse, smooth

WANTED, CLEAN, LEAST, MOST = 100, 1000, 95, 0.01


def shipped() -> list[ConsistencyCheck]:
    """Every consistency check there is."""
    return list(host.load(host.PluginSpec()).checks)


def verdicts(made: Field, checks: list[ConsistencyCheck], bright: bool) -> dict[str, str] | None:
    """The verdict of each check, None where the target should be bright once and never is."""
    candidate = made.candidate()
    if bright and not candidate.bright[0].any():
        return None
    return {check.name: check.check(candidate).verdict for check in checks}


def collected(make, n: int, checks: list[ConsistencyCheck], seed: int, bright: bool = True) -> list[dict[str, str]]:
    """Verdicts of the first n seeds, from a given one on, whose target is bright at least once if it is to be."""
    found: list[dict[str, str]] = []
    while len(found) < n:
        answer = verdicts(make(seed), checks, bright)
        found += [] if answer is None else [answer]
        seed += 1
    return found


def main() -> int:
    """Print the figures; 0 if all goals are met."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--planted", type=int, default=WANTED)
    parser.add_argument("--clean", type=int, default=CLEAN)
    parser.add_argument("--first-seed", type=int, default=0)
    given = parser.parse_args()
    n, n_clean, first = given.planted, given.clean, given.first_seed
    checks = shipped()
    met = True
    for name, (make, wanted) in (PLANTED | SMOOTH).items():
        found = collected(make, n, checks, first, name in PLANTED)
        count = Counter(answer[wanted] for answer in found)
        others = Counter(k for answer in found for k, v in answer.items() if v == "fail" and k != wanted)
        any_concern = sum("fail" in answer.values() for answer in found)
        met &= count["fail"] >= n * LEAST / WANTED
        print(f"{name}: {wanted} {dict(count)}, any concern {any_concern} of {n}; others {dict(others)}", flush=True)
    for name, make, many, limit, bright in (
        ("clean variables", clean, n_clean, MOST * n_clean, True),
        ("smooth variables", smooth, n_clean, MOST * n_clean, False),
        ("30 s pulses in 2 min", short_pulse, n, 0, True),
    ):
        found = collected(make, many, checks, first, bright)
        concerned = sum("fail" in answer.values() for answer in found)
        by = Counter(k for answer in found for k, v in answer.items() if v == "fail")
        power = {check.name: sum(a[check.name] != "uninformative" for a in found) for check in checks}
        met &= concerned <= limit
        print(f"{name}: {concerned} of {many} carry a concern {dict(by)}; informative: {power}", flush=True)
    print("met" if met else "NOT met")
    return 0 if met else 1


if __name__ == "__main__":
    sys.exit(main())
