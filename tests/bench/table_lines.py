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
    name: str
    rates: tuple[float, ...]
    halved: int | None = None


DESIGNS = (
    Design("3 pairs", (250.0, 300.0, 350.0)),
    Design("4 pairs over a wide range", (100.0, 200.0, 300.0, 400.0)),
    Design("6 pairs, each dose twice", (200.0, 200.0, 300.0, 300.0, 350.0, 350.0)),
    Design("6 pairs, the level on 300 mg/day halved", (200.0, 225.0, 250.0, 300.0, 325.0, 350.0), halved=3),
)


def simulate(design: Design, spread: float, sets: int, seed: int) -> list[str]:
    """One line of the table for each method."""
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
    lines = []
    for method in METHODS:
        vmax, km, covered = np.array(found[method], dtype=float).reshape(-1, 3).T
        head = f"| {100 * spread:.0f} % | {method} | {100 * (1 - len(vmax) / sets):.1f} % "
        if len(vmax) < 20:
            lines.append(head + "| too few answers | | | | |")
            continue
        lines.append(
            head
            + f"| {100 * (np.median(vmax) - 1):+.1f} % | {100 * np.sqrt(np.mean(np.log(vmax) ** 2)):.1f} % "
            f"| {100 * (np.median(km) - 1):+.1f} % | {100 * np.sqrt(np.mean(np.log(km) ** 2)):.1f} % "
            f"| {100 * covered.mean():.0f} % |"
        )
    return lines


def main() -> None:
    parser = argparse.ArgumentParser(description="How the five methods fare on simulated steady levels.")
    parser.add_argument("--sets", type=int, default=500, help="simulated sets of levels in each cell")
    parser.add_argument("--seed", type=int, default=20260301)
    options = parser.parse_args()
    started = time.process_time()
    print(f"True Vmax {VMAX:.0f} mg/day, true Km {KM:.0f} mg/L.")
    for design in DESIGNS:
        doses = ", ".join(f"{rate:.0f}" for rate in design.rates)
        print(f"\n{design.name} ({doses} mg/day)\n")
        print("| spread | method | failed | Vmax bias | Vmax RMSE | Km bias | Km RMSE | coverage |")
        print("|---|---|---|---|---|---|---|---|")
        for spread in SPREADS:
            print("\n".join(simulate(design, spread, options.sets, options.seed)))
    taken = time.process_time() - started
    print(f"\n{options.sets} sets in each cell, seed {options.seed}; {taken:.0f} s of processor time.")


if __name__ == "__main__":
    main()
