"""The scales of charts."""

from __future__ import annotations

from legworth.service.pages.chart import Scale


def test_scales_hold_their_ends_and_round_steps() -> None:
    for high in (0.0, 0.3, 1.0, 7.0, 99.0, 100.0, 101.0, 12345.6):
        scale = Scale.up(high)
        assert scale.high >= high
        assert 1 <= len(scale.ticks) <= 7
        assert float(scale(0.0)) > float(scale(scale.high))
    falling = Scale.across(6.5, falling=True)
    assert float(falling(6.5)) < float(falling(0.0))
