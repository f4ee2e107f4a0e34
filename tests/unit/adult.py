"""The adult the tests of the estimate are about: a population at 70 kg, made for them."""

from __future__ import annotations

from pkcalc.drugs.profile import Prior

PRIOR = Prior(
    population="test",
    words="made for this test",
    vmax_mg_per_day=455.0,
    km_mg_per_L=5.0,
    volume_L=49.0,
    vmax_log_sd=0.246,
    km_log_sd=0.472,
    volume_log_sd=0.198,
    correlation=0.0,
    first_order_per_day=0.0,
    first_order_log_sd=0.0,
    used=(),
    sources=(),
)
