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
    free = run_consult(
        plain(context={"renal_failure": "yes"}, levels=levels("0.8 mg/L", "2 mg/L", kind="free"))
    )
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
    assert "albumin-corrected" in said(run_consult(plain(albumin={"value": "44 g/L"})))
    assert "albumin-corrected" not in said(run_consult(plain(albumin={"value": "45 g/L"})))


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
    assert "adherence-unknown" in said(run_consult(plain(context={"adherence_doubtful": "yes"})))
    assert "adherence-unknown" not in said(run_consult(plain()))


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
