"""What `pkcalc pair` costs beyond its imports, as a ratio to the imports themselves.

    python tests/bench/bench_pair.py

One run in one process: the imports first, then the case of two pairs, the consult and the note, repeated.
"""

from __future__ import annotations

import time


def main() -> None:
    started = time.perf_counter()
    from pkcalc.cli import case_of_pairs
    from pkcalc.consult import run_consult
    from pkcalc.note.document import compose
    from pkcalc.note.text import render

    imported = time.perf_counter() - started

    def once() -> float:
        begun = time.perf_counter()
        case = case_of_pairs(
            drug="phenytoin",
            forms=("sodium",),
            doses=("300 mg/day", "350 mg/day"),
            levels=("8 mg/L", "20 mg/L"),
            kind="total",
            weight="70 kg",
            aim="15 mg/L",
            proposed=("330 mg/day",),
        )
        assert "Km 2.5 mg/L" in render(compose(run_consult(case)))
        return time.perf_counter() - begun

    first = once()
    rest = sorted(once() for _ in range(9))
    print("| what | seconds | of the imports |")
    print("|---|---|---|")
    print(f"| imports | {imported:.2f} | 1 |")
    print(f"| first note of a pair (loads the drug file) | {first:.2f} | {first / imported:.2f} |")
    print(f"| each further one, median of 9 | {rest[4]:.2f} | {rest[4] / imported:.2f} |")


if __name__ == "__main__":
    main()
