"""Coverage and width of the 90 % interval for the next level on synthetic wards. One command:

    OPENBLAS_NUM_THREADS=1 python tests/bench/table_calibration.py [--patients 200] [--cell 5]

Wards: periods of 21 days per dose with a level at the end of each (early: 4 to 9 days), the dose then changed by a
plain step rule; 0.75 h of time jitter, assay 5 %, one to three doses a day. The forecast is of the true level at the
end of the next period, in which as many doses are missed as before. All cells use the defaults of the drug profile
for outpatients. Seeds: 101 was used while choosing the error model; this table uses 2026.
"""

from __future__ import annotations

import argparse
import math
import time

import numpy as np

from pkcalc.backtest.synthetic import Ward, patients
from pkcalc.drugs.profile import load_profile
from pkcalc.estimate.error_model import LevelData, RecordSpread
from pkcalc.estimate.posterior import from_record
from pkcalc.estimate.predict import predicted_levels
from pkcalc.levels import everyday_cv
from pkcalc.site import no_site

TABLE_SEED = 2026


def cells() -> list[tuple[str, Ward]]:
    found = []
    for missed in (0.0, 0.05, 0.10):
        for levels in (2, 3, 4):
            found.append((f"{100 * missed:.0f} % missed", Ward(levels=levels, missed=missed)))
    for levels in (2, 3, 4):
        found.append(("5 % missed, early draws", Ward(levels=levels, days_per_dose=(4, 9))))
    for factor in (0.75, 1.25):
        for levels in (2, 3, 4):
            found.append((f"5 % missed, true Km x {factor}", Ward(levels=levels, km_factor=factor)))
    return found


def run(ward: Ward, *, count: int, seed: int) -> dict[str, float]:
    profile = load_profile("phenytoin")
    prior = next(p for p in profile.populations.values() if p.default).at(70.0, 40.0)
    spread = RecordSpread(
        profile.spread.intake_share["outpatient"],
        profile.spread.wrong_level_chance,
        profile.spread.wrong_level_factor,
    )
    assay = profile.spread.assay_cv
    everyday = everyday_cv(profile, no_site(), assay)
    inside, low_side, high_side, widths, misses, distrusted = 0, 0, 0, [], [], 0
    for patient in patients(ward, prior, count=count, seed=seed):
        levels = [
            LevelData(day, level, assay, day_cv=everyday, index=i)
            for i, (day, level) in enumerate(zip(patient.level_days, patient.level_mg_per_L, strict=True))
        ]
        estimate = from_record(patient.record, levels, prior, spread, n=1024)
        distrusted += not estimate.trusted
        coming = predicted_levels(
            patient.record, levels, spread, estimate, [patient.target_day], following=patient.following
        )
        low, median, high = np.quantile(coming, [0.05, 0.5, 0.95])
        truth = patient.target_mg_per_L
        inside += low <= truth <= high
        low_side += truth < low
        high_side += truth > high
        widths.append(math.log(high / low))
        misses.append(abs(median - truth))
    return {
        "covered": inside / count,
        "below": low_side / count,
        "above": high_side / count,
        "width": math.exp(float(np.median(widths))),
        "miss": float(np.median(misses)),
        "distrusted": distrusted,
    }


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--patients", type=int, default=200)
    parser.add_argument("--seed", type=int, default=TABLE_SEED)
    parser.add_argument("--cell", type=int, help="only this cell (0 for the first)")
    chosen = parser.parse_args()
    print(
        "| ward | levels | covered, % | below / above, % | median width (95 % over 5 %) | median miss, mg/L | not trusted |"
    )
    print("|---|---|---|---|---|---|---|")
    for number, (name, ward) in enumerate(cells()):
        if chosen.cell is not None and number != chosen.cell:
            continue
        begin = time.process_time()
        got = run(ward, count=chosen.patients, seed=chosen.seed)
        spent = (time.process_time() - begin) / chosen.patients
        print(
            f"| {name} | {ward.levels} | {100 * got['covered']:.1f} | {100 * got['below']:.1f} / {100 * got['above']:.1f} "
            f"| x {got['width']:.2f} | {got['miss']:.1f} | {got['distrusted']:.0f} | <!-- {spent:.2f} s per patient -->",
            flush=True,
        )
    print(f"\n{chosen.patients} patients per cell: the standard error of a coverage of 90 % is ", end="")
    print(f"{100 * math.sqrt(0.09 / chosen.patients):.1f} %.")


if __name__ == "__main__":
    main()
