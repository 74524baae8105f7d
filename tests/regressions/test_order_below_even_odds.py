"""`--order find` used to say "locked" at an order whose own odds spoke against it."""

from __future__ import annotations

import numpy as np
import pytest

from fit import analysis
from fit.difference import Order
from fit.orders import OrderSearch
from rig.captures import CaptureChannel
from rig.channels import ChannelSetup, wire_channel
from rig.memory import held_capture


@pytest.mark.parametrize(("odds", "locked"), [(-2.48, False), (9.0, True)])
def test_a_lock_is_told_only_at_an_order_with_odds_for_it(
    monkeypatch: pytest.MonkeyPatch, odds: float, locked: bool
) -> None:
    """The same locked record, once with odds for its order and once with odds against."""
    found = OrderSearch(order=Order(), candidates=((1, 1, odds),), settled=odds > 0, note="")
    monkeypatch.setattr(analysis, "find_order", lambda *_, **__: found)
    time_s = np.arange(20000) / 1000.0
    noise = 1e-3 * np.random.default_rng(2).standard_normal((2, time_s.size))
    pair = np.stack([np.cos(2 * np.pi * 37.0 * time_s), np.cos(2 * np.pi * 37.0 * time_s + 0.4)])
    columns = (CaptureChannel(name="a"), CaptureChannel(name="b"))
    capture = held_capture(pair + noise, 1000.0, columns, "pair")
    channels = [wire_channel(capture, ChannelSetup(channel=k)) for k in (1, 2)]
    measured = analysis.measure_pair(
        channels[0], channels[1], settings=analysis.MeasureSettings(order=None)
    )
    assert (measured.decision.state == "locked") is locked
    if not locked:
        assert "state the order" in measured.decision.reason
