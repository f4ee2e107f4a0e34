"""The posterior against second ways: a plain three-dimensional grid, a Markov chain, and simulated patients.

The grid knows nothing of the analytic volume, the whitened frame, the hopeless nodes or the intake
bookkeeping: it lays (log Vmax, log kappa, log V) out, takes the courses and the sensitivity to every dose
from the engine at a finer setting, and writes the likelihood out part by part. Published methods: emcee after
Foreman-Mackey et al. 2013 (from memory); simulation-based calibration after Talts et al. 2018 (from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import pytest
from scipy.optimize import brentq

from pkcalc import flow
from pkcalc.estimate.error_model import LevelData, RecordSpread
from pkcalc.estimate.posterior import from_record
from pkcalc.estimate.predict import predicted_levels
from pkcalc.record import Absorption, Dose, Record
from tests.unit.adult import PRIOR

CAPSULE = Absorption(ka_per_day=8.0)
QUANTITIES = ("vmax_mg_per_day", "km_mg_per_L", "volume_L")


@dataclass(frozen=True)
class Simulated:
    record: Record
    levels: tuple[LevelData, ...]
    truth: tuple[float, float, float]
    following: tuple[Dose, ...] = ()
    target_day: float = 0.0
    target_mg_per_L: float = 0.0


def simulated(
    rng: np.random.Generator,
    count: int,
    *,
    days: int = 12,
    share: float = 0.05,
    cv: float = 0.1,
) -> Simulated:
    """A patient of the population; every dose differs by a normal fraction of variance p (1 - p), as
    modelled."""
    sd = (PRIOR.vmax_log_sd, PRIOR.km_log_sd, PRIOR.volume_log_sd)
    medians = (PRIOR.vmax_mg_per_day, PRIOR.km_mg_per_L, PRIOR.volume_L)
    vmax, km, volume = (m * math.exp(s * z) for m, s, z in zip(medians, sd, rng.standard_normal(3), strict=True))
    amount = float(rng.choice([200.0, 300.0, 350.0]))
    planned = [Dose(d + 0.375, amount, absorption=CAPSULE) for d in range(days + 4)]
    odds = share / (1 - share)
    habit = 0.5 * odds * rng.standard_normal()
    taken = [
        Dose(d.time_day, d.amount_mg * (1 - share) * max(0.02, 1 + habit + math.sqrt(odds) * z), absorption=CAPSULE)
        for d, z in zip(planned, rng.standard_normal(len(planned)), strict=True)
    ]
    times = np.sort(rng.choice(np.arange(2, days + 1), count, replace=False)) - rng.uniform(0.0, 0.6, count)
    asked = [*times, days + 4.0]
    course = flow.amounts(Record(doses=tuple(taken)), asked, vmax, km * volume)[0] / volume
    noise = np.exp(math.sqrt(math.log1p(cv**2)) * rng.standard_normal(count))
    levels = tuple(
        LevelData(float(t), float(c * e), cv, index=i)
        for i, (t, c, e) in enumerate(zip(times, course, noise, strict=False))
    )
    kept = [d for d in planned if d.time_day < days]
    rest = tuple(d for d in planned if d.time_day >= days)
    return Simulated(Record(doses=tuple(kept)), levels, (vmax, km, volume), rest, days + 4.0, float(course[-1]))


# The grid
# ----------------------------------------------------------------------------------------------------


def plain_grid(case: Simulated, spread: RecordSpread, rate: float, n: int = 110, n_volume: int = 71):
    """5, 50, 95 % points of Vmax, Km and V and the chance of no steady state, by brute force.

    First a coarse grid over the whole population, then a fine one over the box (in a sheared frame) where the
    coarse one found any mass worth 1e-7 of the best.
    """
    sd = np.array([PRIOR.vmax_log_sd, PRIOR.km_log_sd, PRIOR.volume_log_sd])
    mean = np.log([PRIOR.vmax_mg_per_day, PRIOR.km_mg_per_L, PRIOR.volume_L])

    def log_joint(a: np.ndarray, k: np.ndarray, l_: np.ndarray) -> np.ndarray:
        """a, k: (N,); l_: (N, L) -> (N, L)."""
        times = [x.time_day for x in case.levels]
        vmax, kappa = np.exp(a), np.exp(k)
        share = spread.share_at(0.0)
        record = Record(
            doses=tuple(Dose(d.time_day, d.amount_mg * (1 - share), absorption=CAPSULE) for d in case.record.doses)
        )
        x = np.log(flow.amounts(record, times, vmax, kappa, accuracy="fine", typical_per_day=8.0))
        m = len(times)
        cov = np.zeros((len(a), m, m))
        if share > 0:
            doses = [d for d in record.doses if d.time_day < max(times)]
            windows = [(d.time_day - 1e-3, d.time_day + 1e-3) for d in doses]
            gain = flow.sensitivity(record, times, windows, vmax, kappa, typical_per_day=8.0)
            whole = gain.sum(axis=2)
            odds = share / (1 - share)
            cov = odds * gain @ gain.transpose(0, 2, 1) + (0.5 * odds) ** 2 * whole[:, :, None] * whole[:, None, :]
        own = np.diag([math.log1p(lv.assay_cv**2) for lv in case.levels])
        y = np.log([lv.level_mg_per_L for lv in case.levels])
        error = y - x[:, None, :] + l_[:, :, None]
        p = spread.wrong_level_chance
        total = np.full(l_.shape, -np.inf)
        for part in range(m + 1 if p > 0 else 1):
            s = cov + own
            if part:
                s[:, part - 1, part - 1] *= spread.wrong_level_factor**2
            inverse = np.linalg.inv(s)
            square = np.einsum("nlj,njk,nlk->nl", error, inverse, error, optimize=True)
            weight = math.log((p if part else 1 - p) / (1 - p + m * p))
            total = np.logaddexp(total, weight - 0.5 * (square + np.linalg.slogdet(s)[1][:, None]))
        prior = (a - mean[0]) ** 2 / sd[0] ** 2
        prior = prior[:, None] + (k[:, None] - l_ - mean[1]) ** 2 / sd[1] ** 2 + (l_ - mean[2]) ** 2 / sd[2] ** 2
        return total - 0.5 * prior

    def lay(shear: float, a: np.ndarray, c: np.ndarray, l_: np.ndarray):
        """Nodes (a, k = c + shear a) times log volumes."""
        aa, cc = (z.ravel() for z in np.meshgrid(a, c, indexing="ij"))
        k = cc + shear * aa
        return aa, k, log_joint(aa, k, np.broadcast_to(l_, (len(aa), len(l_))))

    wide = 5.5
    volume_axis = mean[2] + sd[2] * np.linspace(-wide, wide, 31)
    a = mean[0] + sd[0] * np.linspace(-wide, wide, 48)
    sd_k = math.hypot(sd[1], sd[2])
    c = mean[1] + mean[2] + sd_k * np.linspace(-wide, wide, 48)
    aa, k, value = lay(0.0, a, c, volume_axis)
    w = np.exp(value - value.max()).sum(axis=1)
    w /= w.sum()
    a_mean, k_mean = w @ aa, w @ k
    shear = float((w @ ((aa - a_mean) * (k - k_mean))) / (w @ (aa - a_mean) ** 2 + 1e-4))
    alive = w > 1e-7 * w.max()
    step_a, step_c = a[1] - a[0], (c[1] - c[0]) + abs(shear) * (a[1] - a[0])
    rest = k - shear * aa
    a = np.linspace(aa[alive].min() - step_a, aa[alive].max() + step_a, n)
    c = np.linspace(rest[alive].min() - step_c, rest[alive].max() + step_c, n)
    volume_axis = mean[2] + sd[2] * np.linspace(-wide, wide, n_volume)
    found_a, found_k, found = [], [], []
    for some in np.array_split(a, 10):
        x, y, v = lay(shear, some, c, volume_axis)
        found_a.append(x)
        found_k.append(y)
        found.append(v)
    aa, k, value = np.concatenate(found_a), np.concatenate(found_k), np.concatenate(found)
    w = np.exp(value - value.max())
    w /= w.sum()

    per_node = w.sum(axis=1)
    by_a = per_node.reshape(n, n).sum(axis=1)
    edges = np.concatenate([[a[0] - 0.5 * (a[1] - a[0])], a + 0.5 * (a[1] - a[0])])
    cumulative = np.concatenate([[0.0], np.cumsum(by_a)])
    vmax = np.interp([0.05, 0.5, 0.95], cumulative, edges)
    none = float(np.interp(math.log(rate), edges, cumulative))
    by_l = w.sum(axis=0)
    step = volume_axis[1] - volume_axis[0]
    l_edges = np.concatenate([[volume_axis[0] - 0.5 * step], volume_axis + 0.5 * step])
    volume = np.interp([0.05, 0.5, 0.95], np.concatenate([[0.0], np.cumsum(by_l)]), l_edges)

    # log Km = k - l is below t where l lies above k - t: at every node from its own cumulated volumes
    up_to = np.concatenate([np.zeros((len(k), 1)), np.cumsum(w, axis=1)], axis=1)
    row = np.arange(len(k))

    def below(t: float) -> float:
        place = np.clip((k - t - l_edges[0]) / step, 0.0, len(volume_axis))
        cell = np.minimum(place.astype(int), len(volume_axis) - 1)
        part = place - cell
        return 1.0 - float(np.sum(up_to[row, cell] * (1 - part) + up_to[row, cell + 1] * part))

    ends = float(k.min() - volume_axis[-1]), float(k.max() - volume_axis[0])
    km = [brentq(lambda t, p=p: below(t) - p, *ends) for p in (0.05, 0.5, 0.95)]
    return np.exp(np.array([vmax, km, volume])), none


def _compare(seed: int, count: int) -> tuple[float, float]:
    """Largest relative quantile difference, and absolute difference of the chance of no steady state."""
    rng = np.random.default_rng((20, seed))
    share = float(rng.choice([0.0, 0.05]))
    case = simulated(rng, count, share=share)
    spread = RecordSpread(share, 0.05)
    rate = float(case.record.doses[0].amount_mg)
    ours = from_record(case.record, case.levels, PRIOR, spread, n=64, rates_mg_per_day=(rate,))
    assert ours.trusted
    expected, none = plain_grid(case, spread, rate)
    found = np.array([[ours.summary[q].low, ours.summary[q].median, ours.summary[q].high] for q in QUANTITIES])
    return float(np.max(np.abs(found / expected - 1))), abs(ours.diagnostics["no_steady_state"][rate] - none)


@pytest.mark.parametrize(("seed", "count"), [(0, 1), (1, 2), (2, 4), (3, 8)])
def test_agrees_with_a_plain_three_dimensional_grid(seed: int, count: int) -> None:
    quantile, chance = _compare(seed, count)
    assert quantile < 0.005
    assert chance < 0.002


@pytest.mark.slow
@pytest.mark.parametrize("count", [1, 2, 4, 8])
def test_agrees_with_a_plain_three_dimensional_grid_on_two_hundred_cases(count: int) -> None:
    found = [_compare(1000 * count + i, count) for i in range(50)]
    assert max(q for q, _ in found) < 0.005
    assert max(c for _, c in found) < 0.002


# The chain
# ---------------------------------------------------------------------------------------------------


@pytest.mark.slow
@pytest.mark.parametrize(("seed", "count"), [(0, 1), (1, 2), (2, 4)])
def test_agrees_with_a_markov_chain_within_its_own_error(seed: int, count: int) -> None:
    import emcee

    rng = np.random.default_rng((40, seed))
    case = simulated(rng, count, share=0.0)
    spread = RecordSpread(0.0, 0.05)
    ours = from_record(case.record, case.levels, PRIOR, spread)
    sd = np.array([PRIOR.vmax_log_sd, PRIOR.km_log_sd, PRIOR.volume_log_sd])
    mean = np.log([PRIOR.vmax_mg_per_day, PRIOR.km_mg_per_L, PRIOR.volume_L])
    y = np.log([lv.level_mg_per_L for lv in case.levels])
    own = np.array([math.log1p(lv.assay_cv**2) for lv in case.levels])
    times = [lv.time_day for lv in case.levels]

    def log_density(theta: np.ndarray) -> np.ndarray:
        course = flow.amounts(
            case.record, times, np.exp(theta[:, 0]), np.exp(theta[:, 1] + theta[:, 2]), typical_per_day=8.0
        )
        z = (y - np.log(course) + theta[:, 2:]) ** 2 / own
        usual = -0.5 * z.sum(axis=1)
        total = usual + math.log(0.95)
        for j in range(count):
            wrong = usual + 0.5 * z[:, j] * (1 - 1 / 16) - math.log(4)
            total = np.logaddexp(total, wrong + math.log(0.05))
        return total - 0.5 * np.sum(((theta - mean) / sd) ** 2, axis=1)

    sampler = emcee.EnsembleSampler(64, 3, log_density, vectorize=True)
    start = np.random.RandomState(1)
    sampler.random_state = start.get_state()
    sampler.run_mcmc(mean + 0.3 * sd * start.standard_normal((64, 3)), 3000)
    chain = sampler.get_chain(discard=600)
    length = float(np.max(sampler.get_autocorr_time(discard=600, tol=20)))
    effective = chain.shape[0] * chain.shape[1] / length
    for i, q in enumerate(QUANTITIES):
        values = chain[:, :, i].ravel()
        for p, told in (
            (0.05, ours.summary[q].low),
            (0.5, ours.summary[q].median),
            (0.95, ours.summary[q].high),
        ):
            # share of the chain under our quantile, against its binomial error at the chain's effective
            # length
            share = float(np.mean(values < math.log(told)))
            assert abs(share - p) < 4 * math.sqrt(p * (1 - p) / effective), (q, p)


# Simulation-based calibration
# --------------------------------------------------------------------------------


def _ranks(count: int, *, assumed_cv: float, n: int = 255) -> np.ndarray:
    """Ranks (0 to n) of the true Vmax, Km and level to come among the draws, shape (count, 3)."""
    out = np.empty((count, 3))
    for i in range(count):
        rng = np.random.default_rng((60, i))
        case = simulated(rng, int(rng.integers(1, 4)), days=8)
        levels = [LevelData(x.time_day, x.level_mg_per_L, assumed_cv, index=x.index) for x in case.levels]
        spread = RecordSpread(0.05, 0.0)
        estimate = from_record(case.record, levels, PRIOR, spread, n=n)
        coming = predicted_levels(case.record, levels, spread, estimate, [case.target_day], following=case.following)[
            :, 0
        ]
        drawn = (estimate.vmax_mg_per_day, estimate.km_mg_per_L, coming)
        true = (case.truth[0], case.truth[1], case.target_mg_per_L)
        out[i] = [np.sum(d < t) for d, t in zip(drawn, true, strict=True)]
    return out


def _uniform_p(ranks: np.ndarray, n: int = 255, bins: int = 16) -> np.ndarray:
    """Chi-square p of every column against uniform ranks."""
    from scipy.stats import chisquare

    return np.array([chisquare(np.bincount((c * bins / (n + 1)).astype(int), minlength=bins)).pvalue for c in ranks.T])


@pytest.mark.slow
def test_simulated_patients_are_calibrated() -> None:
    assert np.min(_uniform_p(_ranks(500, assumed_cv=0.1))) > 1e-4


@pytest.mark.slow
def test_calibration_notices_a_wrong_error_size() -> None:
    p = _uniform_p(_ranks(500, assumed_cv=0.01))
    assert np.min(p) < 1e-4
