"""The whole consult: what a stop takes away, what a forecast says, on which scale."""

from __future__ import annotations

import json

import numpy as np
import pytest

from pkcalc.consult import run_consult
from pkcalc.errors import CaseError
from pkcalc.note.data import dumps, note_data
from tests.unit.cases import PLAIN, doses, levels, plain


def proposing(*amounts: str) -> list[dict[str, str]]:
    return [{"form": "extended-capsule", "amount": a, "every": "24 h"} for a in amounts]


def test_the_published_pair_gives_the_published_answer() -> None:
    """Winter, Basic Clinical Pharmacokinetics (value from memory): Km 2.5 mg/L, Vmax about 362 mg/day."""
    estimate = run_consult(plain()).estimates["two levels"]
    assert f"{estimate.point.km_mg_per_L:.1f}" == "2.5"
    assert f"{estimate.point.vmax_mg_per_day:.0f}" == "362"


def test_the_form_has_no_default() -> None:
    nameless = [{k: v for k, v in line.items() if k != "form"} for line in PLAIN["doses"]]
    with pytest.raises(CaseError) as refused:
        plain(doses=nameless)
    assert [p.where.split(" (")[0] for p in refused.value.problems] == ["Dose line 1, form", "Dose line 2, form"]
    assert "there is no default" in refused.value.problems[0].fix


def test_the_salt_factor_is_applied_once() -> None:
    sodium = run_consult(plain()).estimates["two levels"].point
    acid = run_consult(plain(doses=doses("300 mg", "350 mg", form="acid"))).estimates["two levels"].point
    assert acid.vmax_mg_per_day * 0.92 == pytest.approx(sodium.vmax_mg_per_day, rel=1e-12)
    assert acid.km_mg_per_L == pytest.approx(sodium.km_mg_per_L, rel=1e-12)


def test_a_dose_at_vmax_has_no_steady_state() -> None:
    consult = run_consult(plain(method="two levels", proposed=proposing("400 mg")))
    (shown,) = consult.proposed
    assert not np.isfinite(shown.forecast.point_mg_per_L)
    assert shown.forecast.below + shown.forecast.within + shown.forecast.above == pytest.approx(1)
    assert shown.forecast.no_steady_state <= shown.forecast.above
    assert not shown.offered
    assert "no-plateau-at-point" in {c.id for c in consult.cautions}
    data = json.loads(dumps(note_data(consult)))
    assert data["proposed"][0]["forecast"]["level_at_point_mg_per_L"] == {"no_steady_state": True}


def test_a_risky_regimen_is_not_offered() -> None:
    consult = run_consult(plain(method="two levels", proposed=proposing("360 mg", "300 mg")))
    risky, safe = consult.proposed
    assert risky.forecast.above_critical > 0.10
    assert not risky.offered
    assert safe.forecast.above_critical < 0.05
    assert safe.offered
    middling = run_consult(plain(method="two levels", levels=levels("8 mg/L", "17 mg/L"), proposed=proposing("360 mg")))
    assert 0.05 < middling.proposed[0].forecast.above_critical <= 0.10
    assert "regimen-risky" in {c.id for c in middling.cautions}
    texts = [c.text for c in consult.cautions if c.id == "regimen-too-risky"]
    assert any(t.startswith("360 mg") for t in texts)
    assert not any(t.startswith("300 mg") for t in texts)


def test_a_level_drawn_too_early_stops_the_pair() -> None:
    """The published two-dose case whose second level came at day 20 although its own plateau takes two months."""
    early = plain(
        method="two levels",
        patient={"age": "45 years", "weight": "71.4 kg"},
        doses=[
            {
                "form": "acid",
                "amount": "300 mg",
                "every": "24 h",
                "from": "2026-01-05 09:00",
                "until": "2026-06-01 09:00",
            },
            {"form": "acid", "amount": "500 mg", "every": "24 h", "from": "2026-06-01 09:00"},
        ],
        levels=[
            {"value": "4 mg/L", "kind": "total", "drawn": "2026-06-01 08:00"},
            {"value": "36 mg/L", "kind": "total", "drawn": "2026-06-21 08:00"},
        ],
    )
    consult = run_consult(early)
    stop = next(c for c in consult.cautions if c.id == "drawn-too-early")
    assert stop.text.startswith("Level 2: drawn 20 days into its dose")
    assert "two levels" not in consult.estimates


def test_a_pair_of_noise_is_stopped() -> None:
    noisy = run_consult(plain(method="two levels", levels=levels("8 mg/L", "9.5 mg/L")))
    assert "pair-only-noise" in {c.id for c in noisy.cautions}
    assert "two levels" not in noisy.estimates
    warned = run_consult(plain(method="two levels", levels=levels("8 mg/L", "13 mg/L")))
    assert "pair-mostly-noise" in {c.id for c in warned.cautions}
    clear = run_consult(plain(method="two levels"))
    assert not {"pair-mostly-noise", "pair-only-noise"} & {c.id for c in clear.cautions}


def test_free_and_total_are_never_mixed() -> None:
    mixed = [{**PLAIN["levels"][0], "kind": "free", "value": "0.8 mg/L"}, PLAIN["levels"][1]]
    consult = run_consult(plain(method="two levels", levels=mixed))
    assert "free-and-total-mixed" in {c.id for c in consult.cautions}
    assert "two levels" not in consult.estimates


def test_an_impossible_pair_is_said_first() -> None:
    consult = run_consult(plain(method="two levels", levels=levels("20 mg/L", "8 mg/L")))
    assert "two levels" not in consult.estimates
    stop = next(c for c in consult.cautions if c.id == "pair-impossible")
    assert "A higher dose cannot lead to an equal or lower steady level" in stop.text


def test_forecasts_come_on_the_laboratory_scale_too() -> None:
    """A normalised 15 mg/L comes back from the laboratory as 10.2 mg/L at albumin 29 g/L (factor 0.68)."""
    consult = run_consult(
        plain(method="two levels", albumin={"value": "29 g/L"}, levels=levels("5.44 mg/L", "13.6 mg/L"))
    )
    assert consult.observations[0].working_mg_per_L == pytest.approx(8, rel=1e-9)
    present = next(s for s in consult.table if s.present)
    assert present.forecast.total.median == pytest.approx(0.68 * present.forecast.steady.median)
    assert present.forecast.free.median == pytest.approx(0.1 * present.forecast.steady.median)
    assert "albumin 29 g/L" in consult.scale.words


def test_the_aim_has_its_dose_rate() -> None:
    consult = run_consult(plain(method="two levels", aim="15 mg/L"))
    assert consult.aim_rate is not None
    # R = Vmax C / (Km + C) = 362.25 x 15 / 17.5 = 310.5 mg/day
    assert consult.aim_rate.low < 310.5 < consult.aim_rate.high


def test_the_spread_is_named_and_never_the_assay_alone() -> None:
    assert run_consult(plain()).observations[0].spread.total_cv == 0.15
    unsaid = run_consult(plain(context={"adherence_doubtful": "unknown"})).observations[0].spread
    assert unsaid.total_cv == 0.20
    assert unsaid.assay_cv < unsaid.total_cv
    assert run_consult(plain(context={"adherence_doubtful": "yes"})).observations[0].spread.total_cv == 0.30


def test_an_estimate_without_its_certificate_is_stopped(monkeypatch: pytest.MonkeyPatch) -> None:
    from dataclasses import replace

    from pkcalc.estimate import posterior

    honest = posterior.from_record

    def doubtful(*args: object, **kwargs: object) -> object:
        return replace(honest(*args, **kwargs), trusted=False, distrust="two grids differ by 3 %.")  # type: ignore[arg-type]

    monkeypatch.setattr(posterior, "from_record", doubtful)
    consult = run_consult(plain())
    assert consult.chosen is None
    assert consult.table == ()
    assert consult.stopped
    stop = next(c for c in consult.cautions if c.id == "estimate-not-trusted")
    assert stop.text == "The estimate cannot be trusted here: two grids differ by 3 %."


def test_a_method_beside_the_whole_record_that_distrusts_itself_takes_nothing_along(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    from dataclasses import replace

    from pkcalc.estimate import pair

    honest = pair.from_steady_levels

    def doubtful(*args: object, **kwargs: object) -> object:
        return replace(honest(*args, **kwargs), trusted=False, distrust="the pair says little.")  # type: ignore[arg-type]

    monkeypatch.setattr("pkcalc.consult.two_level.from_steady_levels", doubtful)
    consult = run_consult(plain())
    assert consult.chosen is consult.estimates["whole record"]
    assert set(consult.estimates) == {"whole record"}
    assert consult.refusals["two levels"] == "the pair says little."
    assert "estimate-not-trusted" not in {c.id for c in consult.cautions}
    # asked for by name, it is what the numbers would stand on: then nothing is told
    asked = run_consult(plain(method="two levels"))
    assert asked.chosen is None
    assert "estimate-not-trusted" in {c.id for c in asked.cautions}


def test_the_methods_stand_side_by_side() -> None:
    consult = run_consult(plain())
    assert set(consult.estimates) == {"whole record", "two levels"}
    assert consult.chosen is consult.estimates["whole record"]
    assert consult.chosen_why.startswith("whole record: it uses every dose and level")
    asked = run_consult(plain(method="two levels"))
    assert asked.chosen is asked.estimates["two levels"]


def test_one_level_is_enough_for_the_whole_record() -> None:
    consult = run_consult(plain(levels=[PLAIN["levels"][1]]))
    assert set(consult.estimates) == {"whole record"}
    assert "needs two levels on two different doses" in consult.refusals["two levels"]
    assert not consult.stopped


def test_a_single_open_ended_line_is_a_record() -> None:
    case = plain(
        doses=[
            {
                "form": "extended-capsule",
                "daily": [{"time": "21:00", "amount": "300 mg"}],
                "for_about": "3 months",
            }
        ],
        levels=[{"value": "8 mg/L", "kind": "total", "drawn": "2026-12-01 07:00"}],
    )
    consult = run_consult(case)
    assert consult.chosen is not None
    assert consult.record is not None
    assert consult.record.before is not None
    present = next(s for s in consult.table if s.present)
    assert 6 < present.forecast.steady.median < 12


def test_missed_doses_make_a_level_unsteady() -> None:
    lines = [dict(PLAIN["doses"][0]), dict(PLAIN["doses"][1])]
    lines[1]["missed"] = ["2026-11-29 21:00", "2026-11-30 21:00"]
    consult = run_consult(plain(doses=lines))
    second = consult.settling[1]
    assert second.settled is False
    assert second.sentence.endswith("Not steady: 2 doses were missed within that time before it.")
    assert "two levels" not in consult.estimates
    assert "drawn-too-early" in {c.id for c in consult.cautions}
    lines[1]["missed"] = ["2026-09-20 21:00"]
    assert run_consult(plain(doses=lines)).settling[1].settled


def test_no_method_is_a_stop_that_says_what_is_missing() -> None:
    consult = run_consult(plain(patient={"age": "45 years"}, levels=[PLAIN["levels"][1]]))
    assert consult.stopped
    stop = next(c for c in consult.cautions if c.id == "no-estimate")
    assert "No weight is given." in stop.text
    assert "needs two levels on two different doses" in stop.text
    assert "no-estimate" not in {c.id for c in run_consult(plain()).cautions}


def test_an_old_level_is_warned_about() -> None:
    assert "levels-old" in {c.id for c in run_consult(plain(now="2026-12-30 10:00")).cautions}
    assert "levels-old" not in {c.id for c in run_consult(plain()).cautions}


def test_an_order_that_is_left_out_does_not_change_the_spread() -> None:
    ordered = {
        "form": "extended-capsule",
        "amount": "100 mg",
        "every": "24 h",
        "from": "2026-11-30 21:00",
        "source": "ordered",
    }
    with_order = run_consult(plain(doses=[*PLAIN["doses"], ordered]))
    assert with_order.observations[0].spread == run_consult(plain()).observations[0].spread
