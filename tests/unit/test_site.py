"""The site file: what it sets, what it may not set, and every message compared in full."""

from __future__ import annotations

import dataclasses
import hashlib
import tomllib
from importlib import resources
from pathlib import Path

import pytest

from pkcalc.drugs.profile import Profile, load_profile
from pkcalc.errors import CaseError
from pkcalc.site import DAYS, Site, default_facts, load_site, no_site, parse_site

HEAD = """
[site]
name = "Example drug-level service"
protocol = "Phenytoin protocol 3, Feb 2026"
drug = "phenytoin"
"""

FULL = (
    HEAD
    + """
[target]
low = "12 mg/L"
high = "18 mg/L"
aim = "14 mg/L"
critical = "25 mg/L"

[laboratory]
unit = "umol/L"
quantification_limit = "2.5 mg/L"
assay_cv = "6 %"
draw_days = ["Mon", "Thu"]

[spread]
observed = "12 %"
doubtful = "35 %"

[binding]
correction = "elderly"

[limits]
largest_step = "50 mg/day"
largest_daily = "500 mg/day"
largest_single_load = "2 g"

[rates]
injection-adult = "40 mg/min"
injection-child-per-kg = "2 mg/kg/min"

[products]
shelf = "united-states"
only = ["extended-capsule-100", "extended-capsule-30"]
alternate_days = true

[population]
name = "grasela1983"

[chance]
warn = "3 %"
stop = "8 %"

[loss]
too_high = 3

[form]
session_timeout = "10 min"
"""
)


def drug() -> Profile:
    return load_profile("phenytoin")


def problems(text: str) -> list[str]:
    with pytest.raises(CaseError) as caught:
        parse_site(text, "site.toml")
    return [p.text for p in caught.value.problems]


def test_without_a_file_the_defaults_hold_and_nothing_is_local() -> None:
    site = no_site()
    assert (site.file, site.sha256, site.drug, site.settings) == ("", "", "", ())
    assert (site.warn_chance, site.stop_chance) == (0.05, 0.10)
    assert (site.loss_too_high, site.loss_too_low) == (2, 1)
    assert site.session_timeout_min == pytest.approx(20)
    assert site.draw_days == DAYS
    assert site.target(drug()) == (10, 20, "usual range")
    assert site.critical(drug()) == 30
    assert site.assay_cv is None
    assert site.level_total_cv("outpatient") is None
    assert site.shelf == "", "no shelf is preselected"
    assert site.laboratory_unit == "", "no unit is preselected"
    assert site.alternate_days is False


def test_our_own_defaults_say_why() -> None:
    assert set(default_facts()) == {
        "chance.warn",
        "chance.stop",
        "loss.too_high",
        "loss.too_low",
        "form.session_timeout",
    }
    assert all(f.status == "own synthesis" and f.derivation for f in default_facts().values())


def test_every_setting_of_a_full_file_arrives() -> None:
    site = parse_site(FULL, "site.toml")
    assert site.target(drug()) == (12, 18, "local setting, site.toml")
    assert (site.aim_mg_per_L, site.critical(drug())) == (14, 25)
    assert site.laboratory_unit == "umol/L"
    assert site.quantification_limit_mg_per_L == 2.5
    assert site.assay_cv == pytest.approx(0.06)
    assert site.draw_days == ("Mon", "Thu")
    assert site.level_total_cv("observed") == pytest.approx(0.12)
    assert site.level_total_cv("outpatient") is None
    assert site.level_total_cv("doubtful") == pytest.approx(0.35)
    binding = drug().binding
    assert binding is not None
    assert site.albumin_coefficient(binding) == 0.25
    assert no_site().albumin_coefficient(binding) == 0.2
    assert site.largest_step_mg_per_day == 50
    assert site.largest_daily_mg_per_day == 500
    assert site.largest_single_load_mg == 2000
    assert (site.shelf, site.products) == ("united-states", ("extended-capsule-100", "extended-capsule-30"))
    assert site.alternate_days is True
    assert site.population == "grasela1983"
    assert (site.warn_chance, site.stop_chance) == pytest.approx((0.03, 0.08))
    assert (site.loss_too_high, site.loss_too_low) == (3, 1)
    assert site.session_timeout_min == pytest.approx(10)
    assert site.sha256 == hashlib.sha256(FULL.encode()).hexdigest()
    assert (site.name, site.protocol) == ("Example drug-level service", "Phenytoin protocol 3, Feb 2026")


def test_products_are_added_to_the_shelf_of_the_site() -> None:
    text = HEAD + '[products]\nshelf = "united-kingdom"\nadd = ["extended-capsule-30", "extended-capsule-100"]\n'
    site = parse_site(text, "site.toml")
    assert site.added_products == ("extended-capsule-30", "extended-capsule-100")
    assert [x.text for x in site.settings][-1] == (
        "products add: extended-capsule-30, extended-capsule-100 (local setting, instead of nothing more)"
    )
    # one strength of a liquid in place of the other: the shelf is restricted first
    swapped = HEAD + ('[products]\nshelf = "united-states"\nonly = ["extended-capsule-100"]\nadd = ["suspension-30"]\n')
    assert parse_site(swapped, "site.toml").added_products == ("suspension-30",)


def test_every_local_setting_is_named_with_what_it_replaces() -> None:
    texts = [s.text for s in parse_site(FULL, "site.toml").settings]
    assert texts == [
        "target low: 12 mg/L (local setting, instead of 10 mg/L)",
        "target high: 18 mg/L (local setting, instead of 20 mg/L)",
        "target aim: 14 mg/L (local setting, instead of 15 mg/L)",
        "target critical: 25 mg/L (local setting, instead of 30 mg/L)",
        "spread observed: 12 % (local setting, instead of 15 %)",
        "spread doubtful: 35 % (local setting, instead of 30 %)",
        "laboratory assay cv: 6 % (local setting, instead of 10 %)",
        "rates injection-adult: 40 mg/min (local setting, instead of 50 mg/min)",
        "rates injection-child-per-kg: 2 mg/kg/min (local setting, instead of 1 mg/kg/min)",
        "products shelf: united-states (local setting, instead of no shelf)",
        "products only: extended-capsule-100, extended-capsule-30 (local setting, instead of the whole shelf)",
        "chance warn: 3 % (local setting, instead of 5 %)",
        "chance stop: 8 % (local setting, instead of 10 %)",
        "laboratory unit: umol/L (local setting, instead of none preselected)",
        "laboratory quantification limit: 2.5 mg/L (local setting, instead of not stated)",
        "laboratory draw days: Mon, Thu (local setting, instead of every day)",
        "binding correction: elderly (local setting, instead of default)",
        "limits largest step: 50 mg/day (local setting, instead of the published step rule)",
        "limits largest daily: 500 mg/day (local setting, instead of 600 mg/day)",
        "limits largest single load: 2 g (local setting, instead of 1,500 mg)",
        "products alternate days: yes (local setting, instead of no)",
        "population name: grasela1983 (local setting, instead of default)",
        "loss too high: 3 (local setting, instead of 2)",
        "form session timeout: 10 min (local setting, instead of 20 min)",
    ]


def test_a_target_may_be_given_in_molar_units() -> None:
    site = parse_site(HEAD + '[target]\nlow = "40 umol/L"\nhigh = "80 umol/L"\n', "site.toml")
    low, high, _ = site.target(drug())
    assert (low, high) == pytest.approx((40 * 0.25227, 80 * 0.25227))


def test_the_ends_of_what_is_allowed_are_allowed() -> None:
    text = HEAD + '[rates]\ninjection-adult = "50 mg/min"\n[chance]\nwarn = "50 %"\nstop = "50 %"\n'
    site = parse_site(text, "site.toml")
    assert (site.warn_chance, site.stop_chance) == (0.5, 0.5)


def test_half_a_target_keeps_the_other_half() -> None:
    site = parse_site(HEAD + '[target]\nhigh = "18 mg/L"\n', "site.toml")
    assert site.target(drug()) == (10, 18, "local setting, site.toml")


def test_rate_caps_slower_or_up_to_the_published_maximum() -> None:
    site = parse_site(FULL, "site.toml")
    adult = site.rate_cap(drug(), "injection", "adult")
    child = site.rate_cap(drug(), "injection", "child")
    risk = site.rate_cap(drug(), "injection", "risk")
    assert adult is not None
    assert child is not None
    assert risk is not None
    assert (adult.mg_per_min, adult.words) == (40, "adults: at most 40 mg/min (local setting)")
    assert (child.mg_per_min, child.mg_per_kg_min) == (50, 2)
    assert child.words == "children: at most 2 mg/kg/min, never above 50 mg/min (local setting)"
    assert risk.words == "elderly or heart disease: at most 25 mg/min"
    assert site.rate_cap(drug(), "suspension", "adult") is None
    same = no_site().rate_cap(drug(), "injection", "adult")
    assert same is not None
    assert same.words == "adults: at most 50 mg/min"


def test_population_of_the_site_where_it_describes_the_age() -> None:
    site = parse_site(HEAD + '[population]\nname = "teaching"\n', "site.toml")
    assert site.population_for(drug(), 40).id == "teaching"
    assert site.population_for(drug(), None).id == "teaching"
    assert site.population_for(drug(), 8).id == "paediatric-7y-10y"
    assert no_site().population_for(drug(), 40).id == "default"


def test_a_file_for_another_drug_is_refused() -> None:
    other = dataclasses.replace(drug(), id="other")
    with pytest.raises(CaseError) as caught:
        parse_site(FULL, "site.toml").target(other)
    assert str(caught.value) == (
        "Site file: site.toml is written for phenytoin, the case is about other. "
        "Allowed: a site file for other. Leave the site file out or choose the right one."
    )
    with pytest.raises(CaseError):
        parse_site(FULL, "site.toml").critical(other)


def test_a_setting_is_frozen() -> None:
    with pytest.raises(dataclasses.FrozenInstanceError):
        no_site().stop_chance = 1.0  # type: ignore[misc]


@pytest.mark.parametrize(
    ("text", "messages"),
    [
        (
            "[target]\n",
            ["site.toml, site.drug: missing. Allowed: {drugs}. Name the drug the settings are for."],
        ),
        (
            '[site]\nname = "x"\ndrug = "phenytoin"\n',
            [
                "site.toml, site.protocol: missing. Allowed: the name of the service and of its protocol with a "
                "date. Add it."
            ],
        ),
        (
            HEAD + '[target]\nlow = 12\n',
            ['site.toml, target.low: not a text. Allowed: a text in quotation marks, such as "10 mg/L". Write it so.'],
        ),
        (
            HEAD + '[target]\nlow = "12"\n',
            [
                "site.toml, target.low: no unit was given. Allowed: mg/L or mcg/mL or mg/dL or g/L or umol/L or "
                "mmol/L. Give one of these units."
            ],
        ),
        (
            HEAD + '[target]\nlow = "12,5 mg/L"\n',
            [
                'site.toml, target.low: "12,5" was given. Allowed: a plain number such as 12.5 or 1250. A comma can '
                "be a decimal point or a thousands mark: write 12.5 or 12500 without a comma."
            ],
        ),
        (
            HEAD + '[target]\nlow = "12 g/L"\n',
            ["site.toml, target.low: 12 g/L was given. Allowed: 0.0005 to 0.1 g/L. Check the number and its unit."],
        ),
        (
            HEAD + '[target]\nlow = "25 mg/L"\n',
            [
                "site.toml, target: low 25 mg/L, high 20 mg/L, critical 30 mg/L. Allowed: low below high, high not "
                "above critical. Mend the order."
            ],
        ),
        (
            HEAD + '[target]\naim = "22 mg/L"\n',
            ["site.toml, target.aim: 22 mg/L was given. Allowed: 10 mg/L to 20 mg/L. Mend it."],
        ),
        (
            HEAD + '[laboratory]\nunit = "mg/l"\n',
            ['site.toml, laboratory.unit: "mg/l" was given. Allowed: mg/L, mcg/mL, umol/L. Did you mean "mg/L"?'],
        ),
        (
            HEAD + '[laboratory]\nassay_cv = "80 %"\n',
            ["site.toml, laboratory.assay_cv: 80 % was given. Allowed: 0.5 to 50 %. Check the number and its unit."],
        ),
        (
            HEAD + '[laboratory]\ndraw_days = ["Monday"]\n',
            [
                'site.toml, laboratory.draw_days: "Monday" was given. Allowed: Mon, Tue, Wed, Thu, Fri, Sat, Sun. '
                "Choose from these, each once."
            ],
        ),
        (
            HEAD + '[laboratory]\ndraw_days = ["Mon", "Mon"]\n',
            [
                "site.toml, laboratory.draw_days: one of them stands twice. Allowed: Mon, Tue, Wed, Thu, Fri, Sat, "
                "Sun. Choose from these, each once."
            ],
        ),
        (
            HEAD + '[laboratory]\ndraw_days = "Mon"\n',
            [
                "site.toml, laboratory.draw_days: not a list of texts. Allowed: Mon, Tue, Wed, Thu, Fri, Sat, Sun. "
                'Write ["...", "..."].'
            ],
        ),
        (
            HEAD + '[rates]\ninjection-adult = "60 mg/min"\n',
            [
                "site.toml, rates.injection-adult: 60 mg/min was given. Allowed: 0.1 to 50 mg/min. "
                "Check the number and its unit."
            ],
        ),
        (
            HEAD + '[rates]\ninjection-child-per-kg = "4 mg/kg/min"\n',
            [
                "site.toml, rates.injection-child-per-kg: 4 mg/kg/min was given. Allowed: 0.01 to 3 mg/kg/min. "
                "Check the number and its unit."
            ],
        ),
        (
            HEAD + '[limits]\nlargest_single_load = "30 g"\n',
            ["site.toml, limits.largest_single_load: 30 g was given. Allowed: 0.001 to 3 g. Check the number and its unit."],
        ),
        (
            HEAD + '[products]\nonly = ["suspension-30", "suspension-125"]\n',
            [
                "site.toml, products.only: two strengths of the same liquid. Allowed: one of them. Take one of them "
                "out."
            ],
        ),
        (
            HEAD + '[products]\nshelf = "united-states"\nadd = ["suspension-30"]\n',
            [
                "site.toml, products.add: two strengths of the same liquid. Allowed: one of them. Take one of them out."
            ],
        ),
        (
            HEAD + '[products]\nadd = ["suspension-30"]\n',
            [
                "site.toml, products.add: products without a shelf were given. Allowed: a shelf first. Name the shelf "
                "above it."
            ],
        ),
        (
            HEAD + '[products]\nshelf = "united-kingdom"\nadd = ["chewable-50"]\n',
            [
                'site.toml, products.add: "chewable-50" was given. Allowed: extended-capsule-30, extended-capsule-100, '
                "extended-capsule-200, extended-capsule-300, suspension-125, fosphenytoin-50. Choose from these, each "
                "once."
            ],
        ),
        (
            HEAD + '[products]\nshelf = "united-states"\nonly = ["suspension-30"]\n',
            [
                'site.toml, products.only: "suspension-30" was given. Allowed: extended-capsule-30, '
                "extended-capsule-100, extended-capsule-200, extended-capsule-300, chewable-50, suspension-125, "
                "injection-50, fosphenytoin-50. Choose from these, each once."
            ],
        ),
        (
            HEAD + '[products]\nalternate_days = "yes"\n',
            ["site.toml, products.alternate_days: \"yes\" was given. Allowed: true or false. Write one of the two."],
        ),
        (
            HEAD + '[population]\nname = "mine"\n',
            [
                'site.toml, population.name: "mine" was given. Allowed: {populations}. Choose one of these.',
            ],
        ),
        (
            HEAD + '[chance]\nwarn = "20 %"\n',
            ["site.toml, chance.warn: 20 % was given. Allowed: not above the stop, 10 %. Mend one of the two."],
        ),
        (
            HEAD + "[loss]\ntoo_high = 0.5\n",
            ["site.toml, loss.too_high: 0.5 was given. Allowed: a number from 1 to 100. Mend it."],
        ),
        (
            HEAD + "[loss]\ntoo_high = true\n",
            ["site.toml, loss.too_high: true was given. Allowed: a number from 1 to 100. Mend it."],
        ),
        (
            HEAD + '[form]\nsession_timeout = "2 days"\n',
            [
                "site.toml, form.session_timeout: 2 days was given. Allowed: 0.000694 to 0.5 days. "
                "Check the number and its unit."
            ],
        ),
        (
            HEAD + '[target]\nhgh = "18 mg/L"\n',
            ["site.toml, target.hgh: an unknown setting. Allowed: aim, critical, high, low. Take it out or mend its name."],
        ),
        (
            HEAD + "[wibble]\nx = 1\n",
            [
                "site.toml, wibble: an unknown section. Allowed: site, target, spread, laboratory, rates, products, "
                "chance, binding, limits, population, loss, form. Take it out or mend its name."
            ],
        ),
        (
            "target = 3\n" + HEAD,
            ["site.toml, target: not a section. Allowed: [target] with settings below it. Write it so."],
        ),
    ],
)  # fmt: skip
def test_a_wrong_setting_is_refused(text: str, messages: list[str]) -> None:
    from pkcalc.drugs.profile import drug_names

    expected = [
        m.replace("{drugs}", ", ".join(drug_names())).replace("{populations}", ", ".join(drug().populations))
        for m in messages
    ]
    assert problems(text) == expected


def test_every_problem_is_reported_at_once() -> None:
    found = problems(HEAD + '[target]\nlow = "x"\n[laboratory]\nunit = "y"\n[wibble]\n[population]\nname = "z"\n')
    assert [f.split(":")[0] for f in found] == [
        "site.toml, target.low",
        "site.toml, laboratory.unit",
        "site.toml, population.name",
        "site.toml, wibble",
    ]


def test_the_example_shows_every_setting_and_can_be_read() -> None:
    text = resources.files("pkcalc").joinpath("site_example.toml").read_text(encoding="utf-8")
    site = parse_site(text, "site_example.toml")
    shown = tomllib.loads(text)
    for section, keys in shown.items():
        for key in keys:
            if section != "site":
                assert f"{section} {key}".replace("_", " ") in {x.path for x in site.settings}, key
    # and nothing that could be set is missing: a slip in a name lists what is known
    for section in shown:
        broken = text.replace(f"[{section}]", f"[{section}]\nwibble = 1", 1)
        (message,) = problems(broken)
        known = message.split("Allowed: ")[1].split(". Take")[0].split(", ")
        assert set(known) == set(shown[section]), section


def test_reading_from_disk(tmp_path: Path) -> None:
    file = tmp_path / "ours.toml"
    file.write_text(FULL, encoding="utf-8")
    site = load_site(file)
    assert isinstance(site, Site)
    assert site.file == "ours.toml", "no folder of the machine travels with the note"
    assert site == dataclasses.replace(parse_site(FULL, "ours.toml"))


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (
            None,
            "Site file: ours.toml could not be read. Allowed: a readable TOML file. Check its name and folder.",
        ),
        (
            b"\xff\xfe",
            "Site file: ours.toml is not UTF-8 text. Allowed: a TOML file in UTF-8. Save it as UTF-8.",
        ),
        (b"#" * 100_001, "Site file: ours.toml has 100,001 bytes. Allowed: up to 100,000. Shorten the file."),
    ],
)
def test_an_unreadable_file_is_refused(tmp_path: Path, content: bytes | None, message: str) -> None:
    file = tmp_path / "ours.toml"
    if content is not None:
        file.write_bytes(content)
    with pytest.raises(CaseError) as caught:
        load_site(file)
    assert str(caught.value) == message


@pytest.mark.parametrize("text", ["[site", "x = " + "[" * 5000 + "]" * 5000])
def test_broken_toml_is_refused(text: str) -> None:
    with pytest.raises(CaseError) as caught:
        parse_site(text, "site.toml")
    assert str(caught.value).startswith("Site file: site.toml is not valid TOML (")
    assert str(caught.value).endswith("). Allowed: a TOML file. Mend it there.")


def test_an_unknown_drug_is_refused() -> None:
    assert problems(HEAD.replace('"phenytoin"', '"aspirin"'))[0].startswith('Drug: "aspirin" was given.')
