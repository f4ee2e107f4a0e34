"""What the two-way check costs beside the consult it belongs to: python tests/bench/bench_twoways.py"""

from __future__ import annotations

from time import process_time
from typing import Any

from pkcalc import consult, twoways
from pkcalc.demos import demonstration, demonstrations


def main() -> None:
    spent = [0.0]
    compare = twoways.compare

    def timed(*given: Any, **named: Any) -> Any:
        begin = process_time()
        found = compare(*given, **named)
        spent[0] = process_time() - begin
        return found

    twoways.compare = timed
    consult.run_consult(demonstration("one-level"))  # so that no import is counted
    print(f"{'demonstration':<26} {'two-way check':>14} {'consult':>9} {'share':>7}")
    for demo in demonstrations():
        case = demonstration(demo.name)
        begin = process_time()
        consult.run_consult(case)
        whole = process_time() - begin
        print(f"{demo.name:<26} {1000 * spent[0]:>11.0f} ms {1000 * whole:>6.0f} ms {spent[0] / whole:>7.2f}")


if __name__ == "__main__":
    main()
