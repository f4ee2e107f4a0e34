"""Writes a synthetic department as the three tables, clearly marked; never real patients.

Levels come in a mix of units, some rows are wrong in ways that real exports are (an absurd weight, a word in
place of a number, a missing unit), and each depends on the seed and the patient's own number only."""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np

from pkcalc.backtest.folder import SYNTHETIC_MARK, TABLES
from pkcalc.backtest.synthetic import SyntheticPatient, Ward, patients
from pkcalc.drugs.profile import Form, Profile, load_profile
from pkcalc.errors import CaseError, Problem, as_typed
from pkcalc.levels import everyday_cv
from pkcalc.record import Absorption
from pkcalc.site import no_site

MARKED = "SYNTHETIC: invented patients from a seeded generator. Not for clinical use, not evidence about anybody.\n"
_BEGIN = datetime(2020, 1, 6, 8, 0)
_WRONG_ROWS = 5


@dataclass(frozen=True)
class Errors:
    """Shares of patients with a wrong entry, of levels in another unit than mg/L, and of wrong levels.

    wrong_level: share of levels that are simply wrong (mixed up, mistimed), by the drug file's factor; None:
    the drug file's own chance."""

    wrong: float = 0.02
    other_unit: float = 0.3
    wrong_level: float | None = None


def write_department(
    path: str | Path,
    *,
    drug: str,
    count: int,
    seed: int,
    ward: Ward | None = None,
    errors: Errors | None = None,
    weight_kg: float = 70.0,
    age_years: float = 40.0,
) -> None:
    """Write patients.csv, doses.csv and levels.csv of a synthetic department into a new or empty folder.

    The truth is drawn from the drug's default population at the weight, times the ward's factors. The form is
    the first of the drug's forms by mouth that may be given once, twice and three times a day.
    """
    folder = Path(path)
    if folder.is_dir() and any(folder.iterdir()):
        raise CaseError(
            Problem(
                f"Folder {as_typed(folder.name, 80)}",
                "it is not empty",
                "a new or an empty folder for synthetic patients",
                "Choose another folder",
            )
        )
    profile, entry = load_profile(drug), errors or Errors()
    form = _form(profile)
    ward = ward_of(profile) if ward is None else ward
    prior = profile.default_population(age_years).at(weight_kg, age_years)
    folder.mkdir(parents=True, exist_ok=True)
    (folder / SYNTHETIC_MARK).write_text(MARKED, encoding="utf-8")
    files = [(folder / f"{name}.csv").open("w", encoding="utf-8", newline="") for name in TABLES]
    try:
        people, doses, levels = (csv.writer(f, lineterminator="\n") for f in files)
        people.writerow(["patient", "weight", "age", "sex", "group_ward"])
        doses.writerow(["patient", "form", "amount", "unit", "every", "from", "until", "given_by"])
        levels.writerow(["patient", "value", "unit", "kind", "drawn"])
        for one in patients(ward, prior, count=count, seed=seed, target=False):
            chance = np.random.default_rng((seed, one.number, 7))
            wrong = int(chance.integers(_WRONG_ROWS)) if chance.random() < entry.wrong else -1
            key = f"synthetic-{one.number:06d}"
            place = ("east", "west")[int(chance.integers(2))]
            weight = f"{weight_kg * (100 if wrong == 0 else 1):g} kg"
            people.writerow([key, weight, f"{age_years:g} years", ("female", "male")[one.number % 2], place])
            for row in _dose_rows(one, form, wrong):
                doses.writerow([key, *row])
            for row in _level_rows(one, chance, entry, wrong, profile, ward):
                levels.writerow([key, *row])
    finally:
        for f in files:
            f.close()


def ward_of(profile: Profile) -> Ward:
    """An ordinary outpatient department: three levels, irregular draws, one dose in twenty missed unseen."""
    absorption = _form(profile).absorption
    assert absorption is not None
    return Ward(
        levels=3,
        days_per_dose=(8, 28),
        assay_cv=profile.spread.assay_cv,
        day_cv=everyday_cv(profile, no_site(), profile.spread.assay_cv),
        early_h=6.0,
        absorption=Absorption(absorption.ka_per_day, absorption.lag_day, absorption.release_day),
    )


def _form(profile: Profile) -> Form:
    for form in profile.forms.values():
        if form.route == "oral" and form.absorption is not None and {24.0, 12.0, 8.0} <= set(form.intervals_h):
            return form
    raise CaseError(
        Problem(
            "--drug",
            "it has no form by mouth that may be given once, twice and three times a day",
            "a drug with such a form",
            "Choose another drug for synthetic patients",
        )
    )


def _dose_rows(one: SyntheticPatient, form: Form, wrong: int) -> list[list[str]]:
    written = one.record.doses
    starts = [i for i, d in enumerate(written) if i == 0 or d.amount_mg != written[i - 1].amount_mg]
    found = []
    for n, i in enumerate(starts):
        stop = starts[n + 1] if n + 1 < len(starts) else len(written)
        every = written[i + 1].time_day - written[i].time_day
        until = written[stop - 1].time_day + every
        amount = f"{written[i].amount_mg / form.active_fraction:.10g}"
        if wrong == 1 and n == 0:
            amount = "three"
        unit = "" if wrong == 2 and n == 0 else form.amount_unit
        found.append([form.id, amount, unit, f"{24 * every:.0f} h", _clock(written[i].time_day), _clock(until), "self"])
    return found


def _level_rows(
    one: SyntheticPatient, chance: np.random.Generator, entry: Errors, wrong: int, profile: Profile, ward: Ward
) -> list[list[str]]:
    found = []
    share = profile.spread.wrong_level_chance if entry.wrong_level is None else entry.wrong_level
    more_sd = math.sqrt(
        (math.log1p(ward.assay_cv**2) + math.log1p(ward.day_cv**2)) * (profile.spread.wrong_level_factor**2 - 1)
    )
    molar_mass = profile.molar_mass_g_per_mol
    low, high = profile.level_gate_mg_per_L("total")
    for n, (day, measured) in enumerate(zip(one.level_days, one.level_mg_per_L, strict=True)):
        off = chance.standard_normal() if chance.random() < share else 0.0
        level = measured * math.exp(more_sd * off)
        value, unit = f"{level:.4g}", "mg/L"
        other = chance.random() < entry.other_unit
        if not low <= float(value) <= high:
            # beyond what a laboratory measures it reports the limit
            value = f"<{low:g}" if level < low else f">{high:g}"
        elif other:
            value, unit = (value, "mcg/mL") if chance.random() < 0.5 else (f"{1000 * level / molar_mass:.4g}", "umol/L")
        if wrong == 3 and n == 0:
            value = "see chart"
        drawn = "2020-02-31 08:00" if wrong == 4 and n == 0 else _clock(day)
        found.append([value, unit, "total", drawn])
    return found


def _clock(day: float) -> str:
    return (_BEGIN + timedelta(minutes=round(1440 * day))).strftime("%Y-%m-%d %H:%M")
