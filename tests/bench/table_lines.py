"""How the five methods fare on simulated steady levels: a markdown table.

    python tests/bench/table_lines.py            the table for DEVELOPERS.md (about a minute)
    python tests/bench/table_lines.py --sets 50  a quick look

Every set of levels is the true curve times lognormal noise; a method that gives no possible answer is counted
as failed and enters nothing else. Bias is the median of the relative error; RMSE is that of the natural
logarithm of estimate over truth, in per cent, so that halving and doubling weigh alike. Coverage is the share
of sets with an answer whose 90 % interval of Vmax holds the true one; 90 is right. In the last design one
level is halved, as by a missed dose, and no method is told.
"""

from __future__ import annotations

import argparse
import time
from dataclasses import dataclass

import numpy as np

from pkcalc.estimate.lines import METHODS, LineFailure, SteadyPairs, compare

VMAX, KM = 450.0, 5.0
SPREADS = (0.02, 0.05, 0.10, 0.20)


@dataclass(frozen=True)
class Design:
    rates: tuple[float, ...]
    halved: int | None = None

    def words(self) -> str:
        doses = [f"{rate:.0f}" for rate in self.rates]
        if self.halved is not None:
            doses[self.halved] += " (level halved)"
        return ", ".join(doses)


DESIGNS = (
    Design((250.0, 300.0, 350.0)),
    Design((100.0, 200.0, 300.0, 400.0)),
    Design((200.0, 200.0, 300.0, 300.0, 350.0, 350.0)),
    Design((200.0, 225.0, 250.0, 300.0, 325.0, 350.0), halved=3),
)


@dataclass(frozen=True)
class Tally:
    """What one method gave over many sets: share failed, estimates over truth, and whether 90 % held Vmax."""

    failed: float
    vmax: np.ndarray
    km: np.ndarray
    covered: np.ndarray

    def vmax_cell(self) -> str:
        return f"{_bias(self.vmax)}, {_rmse(self.vmax)}; {100 * self.covered.mean():.0f} %" if self._enough() else "-"

    def km_cell(self) -> str:
        failed = f" ({100 * self.failed:.1f} % failed)" if self.failed else ""
        return (f"{_bias(self.km)}, {_rmse(self.km)}" if self._enough() else "-") + failed

    def _enough(self) -> bool:
        return len(self.km) >= 20


def _bias(ratio: np.ndarray) -> str:
    return f"{100 * (np.median(ratio) - 1):+.1f}"


def _rmse(ratio: np.ndarray) -> str:
    return f"{100 * np.sqrt(np.mean(np.log(ratio) ** 2)):.1f}"


def simulate(design: Design, spread: float, sets: int, seed: int) -> dict[str, Tally]:
    """All five methods on the same simulated sets."""
    rng = np.random.default_rng(seed)
    rate = np.array(design.rates)
    true_level = KM * rate / (VMAX - rate)
    if design.halved is not None:
        true_level[design.halved] *= 0.5
    found: dict[str, list[tuple[float, float, bool]]] = {method: [] for method in METHODS}
    for _ in range(sets):
        level = true_level * np.exp(spread * rng.standard_normal(len(rate)))
        pairs = SteadyPairs(rate, level, np.full(len(rate), spread), np.arange(len(rate)))
        for result in compare(pairs, draws=256):
            if isinstance(result, LineFailure):
                continue
            interval, point = result.summary["vmax_mg_per_day"], result.point
            found[result.method].append(
                (point.vmax_mg_per_day / VMAX, point.km_mg_per_L / KM, interval.low <= VMAX <= interval.high)
            )
    tallies = {}
    for method, rows in found.items():
        vmax, km, covered = np.array(rows, dtype=float).reshape(-1, 3).T
        tallies[method] = Tally(1 - len(rows) / sets, vmax, km, covered)
    return tallies


def main() -> None:
    parser = argparse.ArgumentParser(description="How the five methods fare on simulated steady levels.")
    parser.add_argument("--sets", type=int, default=500, help="simulated sets of levels in each cell")
    parser.add_argument("--seed", type=int, default=20260301)
    options = parser.parse_args()
    started = time.process_time()
    cells = [
        (design, spread, simulate(design, spread, options.sets, options.seed))
        for design in DESIGNS
        for spread in SPREADS
    ]
    print(f"True Vmax {VMAX:.0f} mg/day, true Km {KM:.0f} mg/L, {options.sets} sets in each cell.")
    for heading, cell in (
        ("Km: bias %, RMSE % (sets without an answer)", Tally.km_cell),
        ("Vmax: bias %, RMSE %; share of 90 % intervals that hold it", Tally.vmax_cell),
    ):
        print(f"\n{heading}\n\n| doses, mg/day | spread | {' | '.join(METHODS)} |")
        print("|---" * (2 + len(METHODS)) + "|")
        for design, spread, tallies in cells:
            row = " | ".join(cell(tallies[method]) for method in METHODS)
            print(f"| {design.words()} | {100 * spread:.0f} % | {row} |")
    taken = time.process_time() - started
    print(f"\nSeed {options.seed}; {taken:.0f} s of processor time.")


if __name__ == "__main__":
    main()
