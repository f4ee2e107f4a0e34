"""Drugs followed by the hour, and those only projected, on the page."""

from __future__ import annotations

from tests.ui.test_page import open_demonstration, shown


def test_an_hourly_drug_shows_the_hours_to_come_and_who_must_agree() -> None:
    said = shown(open_demonstration("ethanol-dialysis"))
    for words in (
        "Rate that holds 1,250 mg/L while dialysis runs",
        "mL/h of ethanol 10 % v/v for infusion",
        "needs the agreement of a toxicologist or the poison centre",
        "another course than forecast",
        "205 mL/h ethanol 10 % v/v for infusion",
    ):
        assert words in said, words


def test_a_drug_for_projection_only_offers_nothing_on_the_page() -> None:
    said = shown(open_demonstration("theophylline-projection"))
    assert "No regimen is offered: projection only." in said
    assert "projection only, no regimen is offered" in said
    assert "400 mg sustained-release tablets every 12 h" in said
