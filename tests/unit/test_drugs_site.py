"""A site file for a drug followed by the hour: the local target wins, and one drug's file never serves another."""

from __future__ import annotations

import pytest

from pkcalc.consult import run_consult
from pkcalc.errors import CaseError
from pkcalc.site import parse_site
from tests.unit.drug_cases import ethanol

LOCAL = """
[site]
name = "Example"
protocol = "Local protocol, version 1"
drug = "ethanol"

[target]
low = "100 mg/dL"
high = "200 mg/dL"
aim = "150 mg/dL"
critical = "350 mg/dL"
"""


def test_the_local_target_wins() -> None:
    local = run_consult(ethanol(), parse_site(LOCAL, "local.toml"))
    assert (local.goal.low_mg_per_L, local.goal.high_mg_per_L) == (1000, 2000)
    assert local.goal.aim_mg_per_L == 1500
    usual = run_consult(ethanol())
    assert (usual.goal.low_mg_per_L, usual.goal.high_mg_per_L) == (1000, 1500)
    assert local.projection is not None
    assert usual.projection is not None
    assert local.projection.holds[0].mg.median > usual.projection.holds[0].mg.median


def test_a_site_file_of_another_drug_is_refused() -> None:
    other = parse_site(
        '[site]\nname = "Example"\nprotocol = "Version 1, 1 Jan 2026"\ndrug = "phenytoin"\n', "other.toml"
    )
    with pytest.raises(CaseError) as caught:
        run_consult(ethanol(), other)
    assert str(caught.value) == (
        "Site file: other.toml is written for phenytoin, the case is about ethanol. Allowed: a site file for ethanol. "
        "Leave the site file out or choose the right one."
    )
