"""What stands on the shelf here, and what can be dispensed from it: units per dose, doses a day, alternate days.

Rules of making a regimen (ours; common practice, no source): at most two products, solid units only in a mixed
regimen, at most four units of a product at one time, the same volume of a liquid every time, the largest dose of
the day at most three times the smallest and given last. A form is given at every dose time or, where once daily
is allowed for it, at one.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from itertools import combinations, combinations_with_replacement

import numpy as np
from numpy.typing import NDArray

from pkcalc.case import Case
from pkcalc.drugs.profile import Form, Product, Profile
from pkcalc.site import Site
from pkcalc.units import show, show_number

MOST_PRODUCTS = 2
MOST_UNITS_AT_ONCE = 4
LARGEST_TO_SMALLEST = 3.0
#: More than this in one dose is not measured into a mouth or a syringe.
MOST_ML_AT_ONCE = 60.0
TUBE = "feeding tube"
_TIMES = {
    1: ("",),
    2: ("in the morning", "at night"),
    3: ("in the morning", "in the afternoon", "at night"),
    4: ("in the morning", "at noon", "in the evening", "at night"),
}


@dataclass(frozen=True)
class ShelfInUse:
    """The products that may be dispensed here, and how that came about; no products where nobody chose a shelf."""

    words: str
    products: tuple[str, ...]
    sentences: tuple[str, ...]


@dataclass(frozen=True)
class Part:
    """Units of one product at one time: 2 capsules, half a tablet, 6 mL."""

    product: str
    units: float


@dataclass(frozen=True)
class Dispensable:
    """A regimen as it is dispensed: what is taken at each dose time, in the order of the day.

    days: 1, or 2 where the days alternate (one dose time on each). active_mg_per_day: active drug.
    """

    doses: tuple[tuple[Part, ...], ...]
    days: int
    active_mg_per_day: float

    @property
    def products(self) -> tuple[str, ...]:
        return tuple(dict.fromkeys(part.product for dose in self.doses for part in dose))

    @property
    def times_a_day(self) -> int:
        return len(self.doses) // self.days

    def units_a_day(self, profile: Profile) -> float:
        """Capsules and tablets; a liquid counts none."""
        counted = [p.units for dose in self.doses for p in dose if profile.products[p.product].unit != "mL"]
        return sum(counted) / self.days

    def forms(self, profile: Profile) -> tuple[str, ...]:
        return tuple(dict.fromkeys(profile.products[p].form for p in self.products))


def shelf_in_use(case: Case, profile: Profile, site: Site) -> ShelfInUse:
    """The shelf of the case, else of the site file; none is preselected. Only what may be swallowed or infused here.

    Products named in the case restrict it; those of the site file restrict the site's own shelf, or are added to it.
    While tube feeds run, only forms that may go down a feeding tube or into a vein are left.
    """
    plan = case.file.plan
    chosen = plan.shelf or site.shelf
    if not chosen:
        names = " or ".join(s.words for s in profile.shelves.values())
        return ShelfInUse(
            "none",
            (),
            (
                f"No shelf is chosen, so no regimens are listed. Choose one ({names}) or a site file: a regimen is "
                "made of units that can be dispensed.",
            ),
        )
    shelf = profile.shelves[chosen]
    own = chosen == site.shelf
    wanted = plan.products or (site.products if own else ())
    products = [p for p in shelf.products if not wanted or p in wanted]
    sentences = []
    if wanted:
        sentences.append("Restricted to " + ", ".join(profile.products[p].words for p in products) + ".")
    if own and site.added_products and not plan.products:
        products += site.added_products
        added = ", ".join(profile.products[p].words for p in site.added_products)
        sentences.append(f"Added by {site.file}: {added}.")
    if case.answer("tube_feed") == "yes":
        whole = [p for p in products if not _fits_tube(profile.forms[profile.products[p].form])]
        if whole:
            products = [p for p in products if p not in whole]
            sentences.append(
                "Tube fed: left out because they may not go down a feeding tube (never open or crush them): "
                + ", ".join(profile.products[p].words for p in whole)
                + "."
            )
    return ShelfInUse(shelf.words, tuple(products), tuple(sentences))


def _fits_tube(form: Form) -> bool:
    return TUBE in form.routes or form.absorption is None


def oral(products: Iterable[str], profile: Profile) -> tuple[str, ...]:
    """Those of the products that are swallowed (or go down a tube)."""
    return tuple(p for p in products if profile.forms[profile.products[p].form].route == "oral")


def into_a_vein(products: Iterable[str], profile: Profile) -> tuple[str, ...]:
    """Those of the products that are given into a vein."""
    return tuple(p for p in products if profile.forms[profile.products[p].form].route == "intravenous")


def dispensable(
    profile: Profile,
    products: Sequence[str],
    *,
    largest_active_mg_per_day: float,
    alternate_days: bool = False,
) -> tuple[Dispensable, ...]:
    """Everything that can be made of the products up to a daily dose, by daily dose of active drug.

    Regimens that deliver the same active amount per day are merged; the simplest is kept: no alternate days, fewest
    dose times, fewest products, equal doses, fewest units, smallest difference between doses.
    """
    return _dispensable(_Shelf(profile), tuple(products), round(largest_active_mg_per_day, 6), alternate_days)


class _Shelf:
    """A profile that compares by its file's fingerprint, so that lists of regimens can be remembered."""

    def __init__(self, profile: Profile) -> None:
        self.profile = profile

    def __eq__(self, other: object) -> bool:
        return isinstance(other, _Shelf) and other.profile.sha256 == self.profile.sha256

    def __hash__(self) -> int:
        return hash(self.profile.sha256)


@dataclass(frozen=True)
class _Options:
    """What can be taken at one time: units of each of the one or two products, active mg, forms present."""

    products: tuple[Product, ...]
    units: NDArray[np.float64]
    active_mg: NDArray[np.float64]
    has_form: Mapping[str, NDArray[np.bool_]]


@lru_cache(maxsize=64)
def _dispensable(
    shelf: _Shelf, products: tuple[str, ...], largest: float, alternate_days: bool
) -> tuple[Dispensable, ...]:
    profile = shelf.profile
    rows: list[NDArray[np.float64]] = []
    made: list[tuple[_Options, NDArray[np.intp], int]] = []
    for some in _sets(products, profile):
        options = _options(some, profile, largest)
        forms = {p.form: profile.forms[p.form] for p in options.products}
        for times, days in ((1, 1), (2, 1), (3, 1), (4, 1), (2, 2)):
            if days == 2 and not (alternate_days and all(24.0 in f.intervals_h for f in forms.values())):
                continue
            combos = _combos(options, forms, times, days, largest)
            if len(combos):
                rows.append(_keys(options, combos, times, days, len(made)))
                made.append((options, combos, days))
    if not rows:
        return ()
    table = np.concatenate(rows)
    order = np.lexsort(table.T[::-1])
    first = np.ones(len(order), dtype=bool)
    first[1:] = np.diff(table[order, 0]) != 0
    found = []
    for row in table[order[first]]:
        options, combos, days = made[int(row[-2])]
        doses = tuple(
            tuple(Part(p.id, float(u)) for p, u in zip(options.products, options.units[place], strict=True) if u > 0)
            for place in combos[int(row[-1])]
        )
        active = float(options.active_mg[combos[int(row[-1])]].sum()) / days
        found.append(Dispensable(doses, days, active))
    return tuple(found)


def _sets(products: tuple[str, ...], profile: Profile) -> list[tuple[str, ...]]:
    """Single products, and pairs of solid ones."""
    solid = [p for p in products if profile.products[p].unit != "mL"]
    return [(p,) for p in products] + list(combinations(solid, MOST_PRODUCTS))


def _options(some: tuple[str, ...], profile: Profile, largest: float) -> _Options:
    products = tuple(profile.products[p] for p in some)
    per_unit = [p.mg_per_unit * profile.forms[p.form].active_fraction for p in products]
    ranges = []
    for product, active in zip(products, per_unit, strict=True):
        most = MOST_ML_AT_ONCE if product.unit == "mL" else MOST_UNITS_AT_ONCE
        steps = int(min(most, largest / active) / product.smallest_step + 1e-9)
        ranges.append(product.smallest_step * np.arange(steps + 1))
    units = np.stack([g.ravel() for g in np.meshgrid(*ranges, indexing="ij")], axis=1)[1:]
    active_mg = units @ np.array(per_unit)
    forms = {p.form for p in products}
    has = {f: np.any([units[:, i] > 0 for i, p in enumerate(products) if p.form == f], axis=0) for f in forms}
    order = np.argsort(active_mg, kind="stable")
    return _Options(products, units[order], active_mg[order], {f: h[order] for f, h in has.items()})


@lru_cache(maxsize=64)
def _with_replacement(n: int, times: int) -> NDArray[np.intp]:
    if times == 1:
        return np.arange(n)[:, None]
    if times == 2:
        return np.stack(np.triu_indices(n), axis=1)
    return np.array(list(combinations_with_replacement(range(n), times)), dtype=np.intp).reshape(-1, times)


def _combos(options: _Options, forms: Mapping[str, Form], times: int, days: int, largest: float) -> NDArray[np.intp]:
    """Which options at which dose times: amounts rising through the day, forms at times allowed for them."""
    n = len(options.active_mg)
    if any(p.unit == "mL" for p in options.products):
        combos = np.repeat(np.arange(n)[:, None], times, axis=1)
    else:
        combos = _with_replacement(n, times)
    amounts = options.active_mg[combos]
    total = amounts.sum(axis=1) / days
    keep = (total <= largest + 1e-9) & (amounts[:, -1] <= LARGEST_TO_SMALLEST * amounts[:, 0] + 1e-9)
    interval = 24.0 / (times // days)
    for name, form in forms.items():
        given = options.has_form[name][combos].sum(axis=1)
        allowed = (given == 0) | ((given == times) & (interval in form.intervals_h))
        if 24.0 in form.intervals_h:
            allowed |= given == 1
        keep &= allowed
    if days == 2:
        keep &= combos[:, 0] != combos[:, 1]
    kept: NDArray[np.intp] = combos[keep]
    return kept


def _keys(options: _Options, combos: NDArray[np.intp], times: int, days: int, number: int) -> NDArray[np.float64]:
    """One row per regimen, sorted by columns: active amount, then how simple it is, then where it is kept."""
    amounts = options.active_mg[combos]
    units = options.units[combos]
    solid = np.array([p.unit != "mL" for p in options.products])
    return np.column_stack(
        [
            np.round(amounts.sum(axis=1) / days, 6),
            np.full(len(combos), days - 1.0),
            np.full(len(combos), times / days),
            (units.sum(axis=1) > 0).sum(axis=1),
            (amounts[:, -1] - amounts[:, 0] > 1e-9),
            (units * solid).sum(axis=(1, 2)) / days,
            np.round(amounts[:, -1] - amounts[:, 0], 6),
            np.full(len(combos), number),
            np.arange(len(combos)),
        ]
    ).astype(np.float64)


def part_words(part: Part, profile: Profile) -> str:
    """'2 capsules of 100 mg', 'half a tablet of 50 mg', '6 mL of oral suspension, 125 mg in 5 mL (150 mg)'."""
    product = profile.products[part.product]
    unit = profile.forms[product.form].amount_unit
    if product.unit == "mL":
        amount = show(part.units * product.mg_per_unit, unit, 6)
        return f"{show_number(part.units, 6)} mL of {product.words} ({amount})"
    whole, half = int(part.units), part.units % 1
    size = show(product.mg_per_unit, unit, 6)
    if half == 0:
        return f"{whole} {product.unit}{'' if whole == 1 else 's'} of {size}"
    share = {0.5: "half", 0.25: "a quarter", 0.75: "three quarters"}[half]
    if whole == 0:
        return f"half a {product.unit} of {size}" if half == 0.5 else f"{share} of a {product.unit} of {size}"
    return (
        f"{whole} and a half {product.unit}s of {size}"
        if half == 0.5
        else f"{whole} and {share} {product.unit}s of {size}"
    )


def dispense_words(regimen: Dispensable, profile: Profile) -> str:
    """What is dispensed and when: '1 capsule of 300 mg and 2 capsules of 30 mg once daily'."""
    return _timed([" and ".join(part_words(p, profile) for p in dose) for dose in regimen.doses], regimen.days)


def regimen_words(regimen: Dispensable, profile: Profile) -> str:
    """The regimen by labelled amounts: '360 mg extended capsules once daily'."""
    named = []
    for dose in regimen.doses:
        amounts: dict[str, float] = {}
        for part in dose:
            product = profile.products[part.product]
            amounts[product.form] = amounts.get(product.form, 0.0) + part.units * product.mg_per_unit
        named.append(
            " and ".join(
                f"{show(mg, profile.forms[f].amount_unit, 6)} {profile.forms[f].words}" for f, mg in amounts.items()
            )
        )
    return _timed(named, regimen.days)


def _timed(doses: Sequence[str], days: int) -> str:
    if days == 2:
        return f"{doses[0]} and {doses[1]} on alternate days"
    if len(doses) == 1:
        return f"{doses[0]} once daily"
    if len(set(doses)) == 1:
        return f"{doses[0]} every {24 // len(doses)} h"
    words: list[str] = []
    for dose, time in zip(doses, _TIMES[len(doses)], strict=True):
        words.append(f"{dose} {time}")
    return ", ".join(words[:-1]) + " and " + words[-1]


def made_from(labelled_mg: float, form: str, products: Iterable[str], profile: Profile) -> tuple[Part, ...] | None:
    """One dose of a form from the shelf with the fewest units of at most two products; None where it cannot be."""
    mine = [profile.products[p] for p in products if profile.products[p].form == form]
    best: tuple[tuple[int, float], tuple[Part, ...]] | None = None
    for product in mine:
        if (units := _units(labelled_mg, product)) is not None:
            rank = (1, units if product.unit != "mL" else 0.0)
            if best is None or rank < best[0]:
                best = rank, (Part(product.id, units),)
    solid = [p for p in mine if p.unit != "mL"]
    for one, two in combinations(solid, MOST_PRODUCTS):
        for step in range(1, int(MOST_UNITS_AT_ONCE / one.smallest_step) + 1):
            count = step * one.smallest_step
            rest = labelled_mg - count * one.mg_per_unit
            if rest > 0 and (units := _units(rest, two)) is not None:
                rank = (2, count + units)
                if best is None or rank < best[0]:
                    best = rank, (Part(one.id, count), Part(two.id, units))
    return best[1] if best else None


def _units(mg: float, product: Product) -> float | None:
    most = MOST_ML_AT_ONCE if product.unit == "mL" else MOST_UNITS_AT_ONCE
    units = round(mg / product.mg_per_unit / product.smallest_step) * product.smallest_step
    fits = 0 < units <= most and abs(units * product.mg_per_unit - mg) <= 1e-6 * mg
    return units if fits else None
