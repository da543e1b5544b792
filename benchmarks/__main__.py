"""``python -m benchmarks``: run the named problems, print them, and write the page of the documentation on demand."""

from __future__ import annotations

import argparse
import os
from pathlib import Path

THREAD_VARIABLES = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")


def main() -> int:
    parser = argparse.ArgumentParser(prog="python -m benchmarks", description=__doc__)
    parser.add_argument("--profile", choices=("tiny", "quick", "full"), default="quick")
    parser.add_argument("--only", metavar="NAME", action="append", help="one problem; may be repeated")
    parser.add_argument(
        "--threads", default="1", help="threads for linear algebra, the same for every task (default 1)"
    )
    parser.add_argument("--write", metavar="FILE", type=Path, help="write the page of the documentation")
    given = parser.parse_args()
    for variable in THREAD_VARIABLES:  # before numpy is imported, which reads them once
        os.environ[variable] = given.threads

    from benchmarks.page import load, machine, page, section  # noqa: PLC0415
    from benchmarks.profiles import PROFILES  # noqa: PLC0415
    from benchmarks.registry import PROBLEMS  # noqa: PLC0415

    names = given.only or list(PROBLEMS)
    unknown = [name for name in names if name not in PROBLEMS]
    if unknown:
        parser.error(f"no benchmark {unknown[0]!r}; there are: {', '.join(PROBLEMS)}")
    print("Measured on:", machine(given.threads))
    before = load()
    results = {}
    for name in names:
        print(f"\n== {name}: {PROBLEMS[name].title}", flush=True)
        results[name] = PROBLEMS[name].run(PROFILES[given.profile])
        print(section(results[name]), flush=True)
    if given.write is not None:
        given.write.write_text(
            page(results, given.profile, given.threads, (before, load())), encoding="utf-8"
        )
    broken = [name for name, result in results.items() if not all(each.holds for each in result.agreements)]
    if broken:
        print("\nNot the same numbers as the rival:", ", ".join(broken))
    return 1 if broken else 0


if __name__ == "__main__":
    raise SystemExit(main())
