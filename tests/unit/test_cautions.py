"""Every caution fires in one case and is silent in a near miss."""

from __future__ import annotations

from pkcalc.consult import Consult, run_consult
from tests.unit.cases import levels, plain

EVERYTHING = {"two-level", "estimate", "projection", "regimens", "loading", "next level"}


def said(consult: Consult) -> set[str]:
    return {c.id for c in consult.cautions}


def test_seizing_now_takes_every_number_away() -> None:
    consult = run_consult(plain(context={"seizing_now": "yes"}))
    assert "status-epilepticus" in said(consult)
    assert consult.blocked >= EVERYTHING
    assert consult.chosen is None
    assert not consult.estimates
    assert "status-epilepticus" not in said(run_consult(plain(context={"seizing_now": "unknown"})))


def test_overdose_takes_every_number_away() -> None:
    consult = run_consult(plain(context={"overdose": "yes"}))
    assert "overdose" in said(consult)
    assert consult.chosen is None
    assert not consult.estimates
    assert "overdose" not in said(run_consult(plain()))


def test_under_six_months_is_refused() -> None:
    sips = [{"form": "suspension", "amount": "15 mg", "every": "12 h", "from": "2026-11-10 09:00"}]
    low = [{"value": "8 mg/L", "kind": "total", "drawn": "2026-12-01 07:00"}]
    young = {"age": "5 months", "weight": "6 kg"}
    consult = run_consult(plain(patient=young, doses=sips, levels=low))
    assert "too-young" in said(consult)
    assert consult.chosen is None
    assert not consult.estimates
    assert "too-young" not in said(
        run_consult(plain(patient={"age": "6 months", "weight": "6 kg"}, doses=sips, levels=low))
    )


def test_a_total_level_in_renal_failure_is_stopped() -> None:
    consult = run_consult(plain(context={"renal_failure": "yes"}))
    assert "renal-failure-total" in said(consult)
    assert consult.chosen is None
    free = run_consult(plain(context={"renal_failure": "yes"}, levels=levels("0.8 mg/L", "2 mg/L", kind="free")))
    assert "renal-failure-total" not in said(free)
    assert free.chosen is not None


def test_a_total_level_under_valproate_is_stopped() -> None:
    consult = run_consult(plain(context={"valproate": "yes"}))
    assert "valproate-total" in said(consult)
    assert consult.chosen is None
    free = run_consult(plain(context={"valproate": "yes"}, levels=levels("0.8 mg/L", "2 mg/L", kind="free")))
    assert "valproate-total" not in said(free)


def test_a_total_level_in_pregnancy_is_stopped() -> None:
    consult = run_consult(plain(context={"pregnancy": "yes"}))
    assert "pregnancy-total" in said(consult)
    assert consult.chosen is None
    free = run_consult(plain(context={"pregnancy": "yes"}, levels=levels("0.8 mg/L", "2 mg/L", kind="free")))
    assert "pregnancy-total" not in said(free)


def test_a_missing_albumin_is_warned_about() -> None:
    assert "albumin-missing" in said(run_consult(plain(albumin=None)))
    assert "albumin-missing" not in said(run_consult(plain()))
    assert "albumin-missing" not in said(
        run_consult(plain(albumin=None, levels=levels("0.8 mg/L", "2 mg/L", kind="free")))
    )


def test_a_corrected_level_is_warned_about() -> None:
    assert "albumin-corrected" in said(run_consult(plain(albumin={"value": "40 g/L"})))
    assert "albumin-corrected" not in said(run_consult(plain(albumin={"value": "41 g/L"})))


def test_a_gel_tube_is_warned_about() -> None:
    assert "gel-tube" in said(run_consult(plain(levels=levels("8 mg/L", "20 mg/L", sample="gel tube"))))
    assert "gel-tube" not in said(run_consult(plain(levels=levels("8 mg/L", "20 mg/L", sample="serum"))))


def test_what_was_not_asked_is_warned_about() -> None:
    assert "binding-unknown" in said(run_consult(plain(context={"valproate": "unknown"})))
    assert "binding-unknown" not in said(run_consult(plain()))


def test_a_missing_weight_is_warned_about() -> None:
    assert "no-weight" in said(run_consult(plain(patient={"age": "45 years"})))
    assert "no-weight" not in said(run_consult(plain()))


def test_doubtful_adherence_is_warned_about() -> None:
    assert "adherence-doubtful" in said(run_consult(plain(context={"adherence_doubtful": "yes"})))
    assert "adherence-doubtful" not in said(run_consult(plain()))


def test_an_unconfirmed_order_is_left_out_and_said() -> None:
    lines = plain().file.model_dump(mode="json", by_alias=True, exclude_defaults=True)["doses"]
    ordered = [
        *lines,
        {
            "form": "extended-capsule",
            "amount": "500 mg",
            "every": "24 h",
            "from": "2026-11-20 21:00",
            "source": "ordered",
        },
    ]
    consult = run_consult(plain(doses=ordered))
    assert "ordered-not-given" in said(consult)
    assert "ordered-not-given" not in said(run_consult(plain()))


def test_cautions_come_in_order_and_once() -> None:
    consult = run_consult(plain(albumin=None, context={"renal_failure": "yes", "valproate": "yes"}))
    ranks = [["stop", "warn", "note"].index(c.severity) for c in consult.cautions]
    assert ranks == sorted(ranks)
    assert len({(c.id, c.text) for c in consult.cautions}) == len(consult.cautions)


def test_hla_positive_first_start_is_stopped() -> None:
    consult = run_consult(plain(context={"hla_b1502": "yes", "new_start": "yes"}))
    assert "hla-b1502" in said(consult)
    assert {"regimens", "loading"} <= consult.blocked
    assert "hla-b1502" not in said(run_consult(plain(context={"hla_b1502": "yes", "new_start": "no"})))
    assert "hla-unknown" in said(run_consult(plain(context={"new_start": "yes"})))


def test_levels_from_before_an_interacting_change_are_not_projected() -> None:
    stopped = run_consult(
        plain(context={"interacting_change": {"answer": "yes", "since": "2026-12-01", "detail": "fluconazole, azole"}})
    )
    stop = next(c for c in stopped.cautions if c.id == "interacting-change")
    assert "on 1 Dec 2026" in stop.text
    assert "azole antifungals: known to raise the level while taken." in stop.text
    assert stopped.table == ()
    later = run_consult(plain(context={"interacting_change": {"answer": "yes", "since": "2026-11-01"}}))
    assert "interacting-change" not in said(later)
    undated = run_consult(plain(context={"interacting_change": "yes"}))
    assert "interacting-change" in said(undated)


def test_levels_from_before_a_feed_change_are_not_projected() -> None:
    changed = {"tube_feed": "yes", "tube_feed_change": {"answer": "yes", "since": "2026-12-01"}}
    stopped = run_consult(plain(context=changed))
    assert "tube-feed-change" in said(stopped)
    assert stopped.table == ()
    changed["tube_feed_change"] = {"answer": "yes", "since": "2026-10-01"}
    later = run_consult(plain(context=changed))
    assert "tube-feed-change" not in said(later)
    assert "tube-feed" in said(later)


def test_no_increase_from_a_low_level_on_doubt() -> None:
    low = levels("4 mg/L", "7 mg/L")
    more = [{"form": "extended-capsule", "amount": "380 mg", "every": "24 h"}]
    doubtful = run_consult(plain(levels=low, proposed=more, context={"adherence_doubtful": "yes"}))
    assert "increase-on-doubt" in said(doubtful)
    assert "increase-on-doubt" in said(
        run_consult(plain(levels=low, proposed=more, context={"adherence_doubtful": "unknown"}))
    )
    observed = run_consult(plain(levels=low, proposed=more))
    assert "increase-on-doubt" not in said(observed)
    less = [{"form": "extended-capsule", "amount": "330 mg", "every": "24 h"}]
    assert "increase-on-doubt" not in said(
        run_consult(plain(levels=low, proposed=less, context={"adherence_doubtful": "yes"}))
    )


def test_overlapping_lines_are_warned_about() -> None:
    lines = plain().file.model_dump(mode="json", by_alias=True, exclude_defaults=True)["doses"]
    open_ended = [{k: v for k, v in lines[0].items() if k != "until"}, lines[1]]
    consult = run_consult(plain(doses=open_ended))
    caution = next(c for c in consult.cautions if c.id == "active-twice")
    assert caution.text.startswith("Dose line 1, dose line 2 run at the same time")
    assert "active-twice" not in said(run_consult(plain()))


def test_an_unrecorded_load_is_warned_about() -> None:
    for answer in ("yes", "unknown"):
        assert "recent-load" in said(run_consult(plain(context={"recent_load": answer})))
    assert "recent-load" not in said(run_consult(plain()))
    lines = plain().file.model_dump(mode="json", by_alias=True, exclude_defaults=True)["doses"]
    load = {"form": "injection", "amount": "500 mg", "over": "20 min", "at": "2026-11-29 22:00"}
    recorded = run_consult(plain(doses=[*lines, load], context={"recent_load": "yes"}))
    assert "recent-load" not in said(recorded)


ASKED = {
    "toxic_signs": "toxic-signs",
    "im_route": "im-route",
    "form_change": "form-change",
    "extracorporeal": "extracorporeal",
    "temperature_management": "temperature-management",
    "delivery": "delivery",
    "hepatic_failure": "hepatic-failure",
    "heart_block": "heart-block",
    "renal_reduced": "renal-reduced-total",
    "critical_illness": "critical-illness-total",
}


def test_every_yes_has_its_warning_and_no_stays_silent() -> None:
    yes = said(run_consult(plain(context=dict.fromkeys(ASKED, "yes"))))
    no = said(run_consult(plain(context=dict.fromkeys(ASKED, "no"))))
    assert set(ASKED.values()) <= yes
    assert not set(ASKED.values()) & no


def test_every_caution_fires_somewhere_in_the_tests() -> None:
    """Each id of the caution files is named in this file or in its neighbours."""
    from pathlib import Path

    from pkcalc.cautions import rules_of

    here = Path(__file__).parent
    texts = "".join(p.read_text(encoding="utf-8") for p in here.glob("test_*.py"))
    assert [r.id for r in rules_of("phenytoin") if f'"{r.id}"' not in texts] == []


def test_weight_age_label_and_missed_doses_are_noted() -> None:
    lines = plain().file.model_dump(mode="json", by_alias=True, exclude_defaults=True)["doses"]
    lines[1]["missed"] = ["2026-11-20 21:00", "2026-11-21 21:00"]
    noted = run_consult(
        plain(label="Bed 3, 1970-02-03", doses=lines, patient={"weight": "60 kg", "weight_basis": "estimated"})
    )
    assert {"weight-estimated", "age-not-stated", "label-identifier", "missed-doses"} <= said(noted)
    silent = said(run_consult(plain(label="blue folder")))
    assert not {"weight-estimated", "age-not-stated", "label-identifier", "missed-doses"} & silent


def test_a_level_in_the_wrong_unit_does_not_fit() -> None:
    """32 umol/L typed as 32 mg/L: four times too high for the record."""
    wrong = [
        {"value": "8 mg/L", "kind": "total", "drawn": "2026-09-15 07:00"},
        {"value": "8.2 mg/L", "kind": "total", "drawn": "2026-09-14 07:00"},
        {"value": "32 mg/L", "kind": "total", "drawn": "2026-09-13 07:00"},
    ]
    consult = run_consult(plain(levels=wrong))
    assert "level-does-not-fit" in said(consult)
    assert "level-does-not-fit" not in said(run_consult(plain()))


def test_pregnancy_on_a_free_level_is_still_said() -> None:
    consult = run_consult(plain(context={"pregnancy": "yes"}, levels=levels("0.8 mg/L", "2 mg/L", kind="free")))
    assert "pregnancy-population" in said(consult)
    assert "pregnancy-population" not in said(run_consult(plain()))


def test_implausible_parameters_are_warned_about() -> None:
    consult = run_consult(plain(method="two levels", patient={"age": "45 years", "weight": "120 kg"}))
    assert "vmax-out-of-range" in said(consult)
    steep = run_consult(plain(method="two levels", levels=levels("2 mg/L", "20 mg/L")))
    assert "km-out-of-range" in said(steep)
    vmax = next(c for c in consult.cautions if c.id == "vmax-out-of-range")
    assert "the published range 5.33 to 13.9 mg/kg/day (" in vmax.text
    assert "range over patients). Check doses taken" in vmax.text
    usual = said(run_consult(plain(method="two levels", patient={"age": "45 years", "weight": "60 kg"})))
    assert not {"vmax-out-of-range", "km-out-of-range"} & usual


def test_a_change_of_the_offset_within_a_regimen_by_the_clock_is_told() -> None:
    """Summer time ends on 25 Oct 2026: the doses keep +0200 and then stand an hour off the clock on the wall."""
    line = {
        "form": "extended-capsule",
        "daily": [{"time": "21:00", "amount": "300 mg"}],
        "from": "2026-10-01 21:00+02:00",
    }
    changes = {
        "doses": [line],
        "levels": [{"value": "10 mg/L", "kind": "total", "drawn": "2026-11-10 08:00+01:00"}],
        "now": "2026-11-10 12:00+01:00",
        "albumin": None,
    }
    found = [c for c in run_consult(plain(**changes)).cautions if c.id == "offset-changes"]
    assert [c.text for c in found] == [
        "Dose line 1: the doses keep the offset of the first one (+0200), but later times of this record carry +0100. "
        "From that change of the clock on they are followed 1 h away from the clock on the wall; a line of its own from "
        "the change on mends it."
    ]
    ended = {**line, "until": "2026-10-25 02:00+02:00"}
    after = {**line, "from": "2026-10-25 21:00+01:00"}
    assert "offset-changes" not in said(run_consult(plain(**{**changes, "doses": [ended, after]})))
    interval = {"form": "extended-capsule", "amount": "300 mg", "every": "24 h", "from": "2026-10-01 21:00+02:00"}
    assert "offset-changes" not in said(run_consult(plain(**{**changes, "doses": [interval]})))
