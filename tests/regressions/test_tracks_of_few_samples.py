"""Tracks too short for what is fitted to them."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest

from fit.adequacy import squared_amplitudes


@pytest.mark.parametrize("count", [1, 2, 3, 4])
def test_a_course_is_not_fitted_to_fewer_samples_than_it_has_terms(count: int) -> None:
    """Used to warn on the terminal that the polynomial fit may be poorly conditioned."""
    track = SimpleNamespace(
        valid=np.ones(count, dtype=bool),
        amplitude=np.arange(1.0, count + 1.0),
        time_s=np.arange(count) / 10.0,
    )
    assert squared_amplitudes(track, SimpleNamespace(segments=(), start_s=(), step_s=0.1)) is None
