"""All benchmarks, as ratios:  python -m tests.bench [dynamics|evidence|sample|replay|minute]

Speed is reported here and asserted nowhere: a shared machine makes times, not ratios, wander.
"""

from __future__ import annotations

import sys

from tests.bench import dynamics, evidence, minute, replay, sample

PARTS = {
    "dynamics": dynamics.run,
    "evidence": evidence.run,
    "sample": sample.run,
    "replay": replay.run,
    "minute": minute.run,
}


def main() -> None:
    """Run the named parts, or all of them."""
    wanted = sys.argv[1:] or list(PARTS)
    unknown = set(wanted) - set(PARTS)
    if unknown:
        sys.exit(f"no benchmark {', '.join(sorted(unknown))}; there are {', '.join(PARTS)}")
    for name in wanted:
        print(f"== {name}", flush=True)
        PARTS[name]()


if __name__ == "__main__":
    main()
