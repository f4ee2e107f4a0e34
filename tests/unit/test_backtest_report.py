"""The sums of a back-test against plain calculation, the hint against known populations, and the command."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner
from scipy import stats

from pkcalc.backtest.accuracy import ERROR, FEWEST_PATIENTS, HIGHER, IN90, Bands, Findings, Share, gather
from pkcalc.backtest.hint import Hint, refit
from pkcalc.backtest.outlook import (
    CHOICES,
    FORECAST,
    LEFT_OUT,
    METHODS,
    PATIENT,
    PRIOR,
    SET_ASIDE,
    TWO,
    WHOLE,
    Row,
)
from pkcalc.backtest.report import verdict
from pkcalc.cli import FORECASTS, cli

BANDS = Bands(10, 20, 30)


def row(number: int, level: int, method: str, said: float, came: float, factor: float = 1.5) -> Row:
    """A forecast whose 90 % interval is a factor either way, its 50 % interval the root of that."""
    root = math.sqrt(factor)
    return Row(
        number,
        f"k{number}",
        FORECAST,
        level,
        method,
        earlier=level - 1,
        observed_mg_per_L=came,
        forecast_mg_per_L=said,
        low_90_mg_per_L=said / factor,
        low_50_mg_per_L=said / root,
        high_50_mg_per_L=said * root,
        high_90_mg_per_L=said * factor,
        rank=float(stats.norm.cdf(math.log(came / said) / math.log(factor) * 1.645)),
        groups=json.dumps({"ward": "ew"[number % 2]}),
    )


def cohort(patients: int, *, seed: int, bias: float = 1.0, spread: float = 0.25, per: int = 1) -> list[Row]:
    chance = np.random.default_rng(seed)
    found = []
    for n in range(patients):
        own = chance.normal(0, 0.1)
        for level in range(1, per + 1):
            came = float(np.exp(chance.normal(math.log(15), 0.5)))
            said = came * bias * float(np.exp(own + chance.normal(0, spread)))
            rough = came * float(np.exp(chance.normal(0, 3 * spread)))
            found += [row(n, level, PRIOR, rough, came), row(n, level, WHOLE, said, came)]
    return found


def test_sums_are_what_plain_calculation_gives() -> None:
    rows = cohort(200, seed=1)
    whole = [r for r in rows if r.method == WHOLE]
    said, came = (np.array([getattr(r, f) for r in whole]) for f in ("forecast_mg_per_L", "observed_mg_per_L"))
    error = said - came
    tally = gather(rows, BANDS, count=200).by_method[WHOLE]
    s = tally.sums
    assert (s.rows, s.patients) == (200, 200)
    assert s.mean(1).value == pytest.approx(error.mean(), rel=1e-12)
    assert s.mean(2).value == pytest.approx(np.abs(error).mean(), rel=1e-12)
    assert math.sqrt(s.mean(3).value) == pytest.approx(math.sqrt((error**2).mean()), rel=1e-12)
    assert tally.median_absolute_error() == pytest.approx(np.median(np.abs(error)), rel=0.02)
    assert s.mean(5).value == np.mean(np.abs(error) <= 0.2 * came)
    assert s.mean(6).value == np.mean(np.abs(error) <= 0.3 * came)
    ratio = np.abs(np.log(came / said))
    assert s.mean(7).value == np.mean(ratio <= math.log(1.5) / 2)
    assert s.mean(8).value == np.mean(ratio <= math.log(1.5))
    assert tally.covered(0.9) == pytest.approx(s.mean(8).value, abs=1e-12)


def test_with_one_level_each_the_interval_is_the_t_interval() -> None:
    rows = [r for r in cohort(60, seed=2) if r.method == WHOLE]
    error = np.array([r.forecast_mg_per_L - r.observed_mg_per_L for r in rows])  # type: ignore[operator]
    low, high = stats.t.interval(0.95, 59, error.mean(), stats.sem(error))
    found = gather(rows, BANDS, count=60).by_method[WHOLE].sums.mean(1)
    assert (found.low, found.high) == (pytest.approx(low, rel=1e-9), pytest.approx(high, rel=1e-9))


def test_levels_of_one_patient_do_not_count_as_many_patients() -> None:
    """The same 40 patients written five times over: the interval must stay, not shrink."""
    once = [r for r in cohort(40, seed=3) if r.method == WHOLE]
    often = [r for r in once for _ in range(5)]
    a, b = (gather(rows, BANDS, count=40).by_method[WHOLE].sums.mean(1) for rows in (once, often))
    assert b.low == pytest.approx(a.low, rel=1e-9)
    assert b.high == pytest.approx(a.high, rel=1e-9)


def test_methods_are_compared_on_the_levels_both_forecast() -> None:
    rows = cohort(80, seed=4)
    kept = [r for r in rows if not (r.method == WHOLE and r.number < 30)]
    found = gather(kept, BANDS, count=80).against[(PRIOR, WHOLE)]
    both = [(a, b) for a, b in zip(rows[::2], rows[1::2], strict=True) if b.number >= 30]
    d = [
        abs(b.forecast_mg_per_L - b.observed_mg_per_L) - abs(a.forecast_mg_per_L - a.observed_mg_per_L)  # type: ignore[operator]
        for a, b in both
    ]
    assert found.rows == 50
    assert found.mean(1).value == pytest.approx(np.mean(d), rel=1e-12)
    assert found.mean(2).value == np.mean(np.array(d) < 0)


def test_rows_are_split_by_band_number_of_levels_and_subgroup() -> None:
    found = gather(cohort(50, seed=5, per=2), BANDS, count=50)
    assert set(found.split) == {"level that came", "level forecast", "earlier levels", "ward"}
    assert set(found.split["level that came"]) <= set(BANDS.names())
    for table in found.split.values():
        assert sum(t[WHOLE].sums.rows for t in table.values() if WHOLE in t) == 100
    assert [BANDS.of(x) for x in (9.99, 10, 20, 30)] == list(BANDS.names())


def test_the_largest_misses_are_listed() -> None:
    rows = cohort(100, seed=6)
    found = gather([*rows, row(100, 1, WHOLE, 2.0, 60.0)], BANDS, count=101)
    far = sorted(
        (abs(math.log(r.forecast_mg_per_L / r.observed_mg_per_L)) for r in rows if r.method == WHOLE), reverse=True
    )  # type: ignore[operator]
    got = [x[0] for x in sorted(found.worst, reverse=True)]
    assert got == [math.log(30), *far[:19]]


def test_the_interval_of_a_share_is_wilson_s_and_stays_within_0_and_1() -> None:
    """One level each; Student's quantile in place of the normal one."""
    rows = [r for r in cohort(60, seed=2) if r.method == WHOLE]
    sums = gather(rows, BANDS, count=60).by_method[WHOLE].sums
    p, n, t = sums.mean(IN90).value, 60, stats.t.ppf(0.975, 59)
    # the variance between 60 patients is that of 59 independent levels
    n -= 1
    edges = np.roots([1 + t**2 / n, -(2 * p + t**2 / n), p**2])
    got = sums.share(IN90)
    assert (got.low, got.high) == (pytest.approx(min(edges), rel=1e-9), pytest.approx(max(edges), rel=1e-9))
    every = gather([row(n, 1, WHOLE, 10.0, 11.0) for n in range(30)], BANDS, count=30).by_method[WHOLE].sums
    inside = every.share(IN90)
    assert (inside.value, inside.high) == (1.0, 1.0)
    assert inside.low == pytest.approx(1 / (1 + stats.t.ppf(0.975, 29) ** 2 / 30), rel=1e-9)


def test_sound_forecasts_of_a_skewed_level_are_not_said_to_err_low() -> None:
    """Medians of a log normal level: the mean error is below 0, and half of the levels come higher."""
    chance = np.random.default_rng(21)
    rows = [row(n, 2, WHOLE, 15.0, float(15 * np.exp(chance.normal(0, 0.6)))) for n in range(400)]
    sums = gather(rows, BANDS, count=400).by_method[WHOLE].sums
    error = sums.mean(ERROR)
    assert error.high is not None
    assert error.high < 0
    assert sums.share(HIGHER).value == pytest.approx(0.5, abs=0.06)
    assert said(rows, 400)[1].endswith(", which agrees with half: no error to one side is seen.")


def said(rows: list[Row], count: int) -> list[str]:
    return verdict(gather(rows, BANDS, count=count), [])


def test_the_verdict_is_in_words() -> None:
    assert said([], 0) == [
        "No level could be forecast from an earlier one, so nothing can be said about this department."
    ]
    few = FEWEST_PATIENTS - 1
    assert said(cohort(few, seed=7), few) == [
        "19 patients had a level forecast from an earlier one; with fewer than 20 nothing can be said about this "
        "department."
    ]
    fair = said(cohort(300, seed=8, spread=math.sqrt((math.log(1.5) / 1.645) ** 2 - 0.01)), 300)
    assert fair[0].endswith("of the levels fell inside the 90 % interval of the whole record, which agrees with 90 %.")
    assert fair[2].startswith("On the same 300 levels the mean absolute error of the whole record is ")
    narrow = said(cohort(300, seed=9, spread=0.5), 300)
    assert narrow[0].endswith(": the intervals are too narrow here. Do not rely on them before the reason is found.")
    wide = said(cohort(300, seed=10, spread=0.05), 300)
    assert wide[0].endswith(": the intervals are wider than they need to be here, which is the safe side.")
    low = said(cohort(300, seed=11, bias=0.8), 300)
    assert low[1].endswith(
        " of the levels came higher than the whole record forecast: its forecasts err low, which is the unsafe side."
    )
    high = said(cohort(300, seed=11, bias=1.3), 300)
    assert high[1].endswith(" of the levels came higher than the whole record forecast: its forecasts err high.")
    assert fair[1].endswith(", which agrees with half: no error to one side is seen.")


def placed(count: int, shift: tuple[float, float], spread: tuple[float, float], seed: int) -> list[Row]:
    """Patients of a normal population, each measured with its own error, seen through the population in use."""
    chance = np.random.default_rng(seed)
    prior = np.array([[0.25**2, 0.3 * 0.25 * 0.45], [0.3 * 0.25 * 0.45, 0.45**2]])
    true = np.array(
        [
            [spread[0] ** 2, 0.3 * spread[0] * spread[1]],
            [0.3 * spread[0] * spread[1], spread[1] ** 2],
        ]
    )
    rows = []
    for n in range(count):
        at = chance.multivariate_normal(shift, true)
        noise = np.diag(chance.uniform(0.05, 0.4, 2) ** 2)
        seen = chance.multivariate_normal(at, noise)
        cov = np.linalg.inv(np.linalg.inv(prior) + np.linalg.inv(noise))
        mean = cov @ np.linalg.inv(noise) @ seen
        rows.append(
            Row(
                n,
                f"k{n}",
                PATIENT,
                population="default",
                log_vmax=mean[0],
                log_km=mean[1],
                var_vmax=cov[0, 0],
                var_km=cov[1, 1],
                cov_vmax_km=cov[0, 1],
                prior_sd_vmax=0.25,
                prior_sd_km=0.45,
                prior_correlation=0.3,
            )
        )
    return rows


def test_a_shifted_population_is_found_and_its_own_is_left_alone() -> None:
    hint = refit("default", placed(400, (math.log(1.2), math.log(0.8)), (0.15, 0.6), seed=1))
    assert hint is not None
    for share, truth in (
        (hint.vmax_ratio, 1.2),
        (hint.km_ratio, 0.8),
        (hint.vmax_log_sd, 0.15),
        (hint.km_log_sd, 0.6),
    ):
        assert share.low is not None
        assert share.high is not None
        assert share.low < truth < share.high
        assert share.high / share.low < 1.6
    assert hint.off == ("Vmax", "Km")
    same = refit("default", placed(400, (0, 0), (0.25, 0.45), seed=3))
    assert same is not None
    assert same.off == ()


def test_intervals_of_the_hint_hold_the_truth_as_often_as_stated() -> None:
    held = 0
    for seed in range(40):
        hint = refit("default", placed(60, (0.1, -0.1), (0.25, 0.45), seed=1000 + seed))
        assert hint is not None
        assert hint.vmax_ratio.low is not None
        assert hint.vmax_ratio.high is not None
        held += hint.vmax_ratio.low < math.exp(0.1) < hint.vmax_ratio.high
    assert stats.binom.cdf(held, 40, 0.95) > 1e-3


def test_too_few_patients_give_no_hint() -> None:
    assert refit("default", placed(19, (0, 0), (0.25, 0.45), seed=1)) is None


def test_what_is_left_out_is_counted() -> None:
    rows = [
        Row(0, "a", SET_ASIDE, reason="x"),
        Row(1, "b", LEFT_OUT, reason="y"),
        row(2, 1, PRIOR, 5, 5),
    ]
    found: Findings = gather(rows, BANDS, count=3)
    assert (dict(found.set_aside), dict(found.left_out)) == ({"x": 1}, {"y": 1})
    assert (found.patients, found.forecast_patients) == (3, 1)
    assert TWO not in found.by_method


def test_the_command_writes_a_report_and_goes_on_where_it_was(tmp_path: Path) -> None:
    folder = str(tmp_path / "new")
    first = CliRunner().invoke(cli, ["backtest", folder, "--synthetic", "2", "--seed", "3"])
    assert first.exit_code == 0, first.output
    assert "SYNTHETIC PATIENTS, not a department's own." in first.stdout
    results = tmp_path / "new" / "pkcalc-backtest"
    report = json.loads((results / "report.json").read_text())
    assert report["pkcalc_backtest"] == 1
    assert report["synthetic"] is True
    assert report["complete"] is True
    assert report["patients"]["in_folder"] == 2
    page = (results / "report.html").read_text()
    assert "SYNTHETIC PATIENTS" in page
    assert page.count("<figure>") == 3
    again = CliRunner().invoke(cli, ["backtest", folder])
    assert again.exit_code == 0
    assert "2 patients were done by an earlier try." in again.stderr
    assert again.stdout == first.stdout


def test_the_command_is_polite_when_interrupted(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def stop(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("pkcalc.backtest.run.outlooks", stop)
    got = CliRunner().invoke(cli, ["backtest", str(tmp_path / "new"), "--synthetic", "2"])
    assert got.exit_code == 1
    assert "Interrupted: 0 of 2 patients are kept. The same command goes on from there.\n" in got.stderr
    assert not (tmp_path / "new" / "pkcalc-backtest" / "report.json").exists()


def test_one_way_to_spread_the_work(tmp_path: Path) -> None:
    got = CliRunner().invoke(cli, ["backtest", str(tmp_path), "--workers", "2", "--cluster", "tcp://127.0.0.1:1"])
    assert got.exit_code == 2
    assert "Error: Give --workers or --cluster, not both" in got.output


def test_only_the_methods_asked_for_are_run(tmp_path: Path) -> None:
    folder = str(tmp_path / "new")
    got = CliRunner().invoke(cli, ["backtest", folder, "--synthetic", "3", "--method", "population"])
    assert got.exit_code == 0, got.output
    report = json.loads((tmp_path / "new" / "pkcalc-backtest" / "report.json").read_text())
    assert report["methods"] == [PRIOR]
    assert list(report["by_method"]) == [PRIOR]
    assert report["population_hint"] == []
    assert report["verdict"] == [
        "The whole record, by which the tool forecasts, was not among the methods asked for: how far its forecasts can "
        "be trusted here is left open."
    ]
    other = CliRunner().invoke(cli, ["backtest", folder])
    assert str(other.exception) == (
        "Folder of results pkcalc-backtest: it holds another run (methods differ). Allowed: a new folder, or the one of "
        "the same run. Give another folder with --out, or delete that one."
    )


def test_the_names_of_the_methods_are_those_of_the_command() -> None:
    assert tuple(CHOICES) == FORECASTS
    assert tuple(CHOICES.values()) == METHODS


def test_a_spread_that_the_patients_say_nothing_of_has_no_interval() -> None:
    """All patients alike within their errors: the most likely spread is none, and no interval is told for it."""
    rows = [replace(r, log_vmax=0.0, log_km=0.0) for r in placed(40, (0, 0), (0.25, 0.45), seed=8)]
    hint = refit("default", rows)
    assert hint is not None
    assert (hint.km_log_sd.low, hint.km_log_sd.high) == (None, None)
    assert hint.off == ()


def test_two_means_are_asked_about_so_each_has_to_lie_further_off() -> None:
    """An interval that just leaves 1 out is what chance gives one time in ten when two are looked at."""
    fine, none = Share(1.0, 0.9, 1.1), Share(1.1, None, None)
    near, far = Share(1.1, 1.002, 1.1**2 / 1.002), Share(1.1, 1.05, 1.1**2 / 1.05)
    for vmax, off in ((fine, ()), (none, ()), (near, ()), (far, ("Vmax",))):
        assert Hint("default", 40, vmax, fine, fine, fine, 0.25, 0.45).off == off
