"""The list of sources: complete, each used, and refused where incomplete."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from pkcalc.drugs.profile import drug_names, load_profile
from pkcalc.errors import DrugFileError
from pkcalc.selfcheck import load_examples
from pkcalc.site import default_facts
from pkcalc.sources import STATUSES, all_sources, parse_sources, source

PACKAGE = Path(__file__).parents[2] / "pkcalc"

GOOD = """
[who1999]
authors = "Who A"
title = "What"
year = "1999"
where = "Journal 1:1-2"
status = "read"
"""


def test_citation_says_whether_it_was_read() -> None:
    (found,) = parse_sources(GOOD, "x.toml").values()
    assert found.citation == "Who A. What. Journal 1:1-2. 1999 (read)."
    (recalled,) = parse_sources(GOOD.replace('"read"', '"memory"'), "x.toml").values()
    assert recalled.citation == "Who A. What. Journal 1:1-2. 1999 (from memory)."
    (own,) = parse_sources(GOOD.replace('"read"', '"own synthesis"'), "x.toml").values()
    assert own.citation == "Who A. What. Journal 1:1-2. 1999 (own synthesis)."


def test_citation_without_a_year_says_nothing_of_it() -> None:
    (found,) = parse_sources(GOOD.replace('"1999"', '"n.d."'), "x.toml").values()
    assert found.citation == "Who A. What. Journal 1:1-2. No date (read)."


def test_every_source_is_complete() -> None:
    assert len(all_sources()) > 40
    for key, entry in all_sources().items():
        assert re.fullmatch(r"[a-z0-9]+(-[a-z0-9]+)*", key), key
        assert entry.key == key
        assert entry.status in STATUSES
        for text in (entry.authors, entry.title, entry.year, entry.where):
            assert text == text.strip() != ""


def test_no_work_stands_twice() -> None:
    works = [(s.authors, s.title, s.year) for s in all_sources().values()]
    assert len(works) == len(set(works))


def test_every_source_is_used() -> None:
    """By a drug file, the service defaults, an example, a caution, or the program's own citations."""
    used = {key for name in drug_names() for fact in load_profile(name).facts.values() for key in fact.sources}
    used |= {key for fact in default_facts().values() for key in fact.sources}
    used |= {example.source for example in load_examples()}
    elsewhere = "".join(p.read_text(encoding="utf-8") for p in PACKAGE.glob("cautions.toml"))
    elsewhere += "".join(p.read_text(encoding="utf-8") for p in PACKAGE.rglob("*.py"))
    elsewhere += "".join(p.read_text(encoding="utf-8") for p in PACKAGE.glob("drugs/*.toml"))  # cautions
    used |= {key for key in all_sources() if f'"{key}"' in elsewhere}
    assert set(all_sources()) - used == set()


def test_every_source_a_caution_names_exists() -> None:
    text = (PACKAGE / "cautions.toml").read_text(encoding="utf-8")
    named = set(re.findall(r'^source = "([^"]+)"', text, re.M))
    assert named, "the pattern itself must find something"
    assert named <= set(all_sources())


def test_one_source_by_its_key() -> None:
    assert source("grasela1983").authors == "Grasela TH et al"


def test_unknown_source_is_refused() -> None:
    with pytest.raises(DrugFileError) as caught:
        source("nobody1900")
    assert str(caught.value) == 'sources.toml: there is no source "nobody1900". Add it there, or mend the key.'


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (
            GOOD.replace('year = "1999"\n', ""),
            'x.toml, who1999.year: missing or empty. Add year = "..." as text.',
        ),
        (
            GOOD.replace('"What"', '"  "'),
            'x.toml, who1999.title: missing or empty. Add title = "..." as text.',
        ),
        (
            GOOD.replace('"1999"', "1999"),
            'x.toml, who1999.year: missing or empty. Add year = "..." as text.',
        ),
        (
            GOOD + 'doi = "10.1/x"\n',
            "x.toml, who1999.doi: unknown entry. Known are: authors, title, year, where, status, note.",
        ),
        (
            GOOD.replace('"read"', '"seen"'),
            'x.toml, who1999.status: "seen" was found. Write one of: read, memory, own synthesis.',
        ),
        (
            'who1999 = "Who"\n',
            "x.toml, who1999: expected a table of source entries. Write [who1999] above them.",
        ),
        (
            GOOD + "note = 1\n",
            "x.toml, who1999.note: not a text. Write it in quotation marks.",
        ),
    ],
)
def test_incomplete_source_is_refused(text: str, message: str) -> None:
    with pytest.raises(DrugFileError) as caught:
        parse_sources(text, "x.toml")
    assert str(caught.value) == message


def test_broken_toml_is_refused() -> None:
    with pytest.raises(DrugFileError) as caught:
        parse_sources("[who", "x.toml")
    assert str(caught.value).startswith("x.toml: the file is not valid TOML (")
